package kafka

import (
	"context"
	"encoding/base64"
	"encoding/binary"
	"net"
	"strconv"

	"github.com/segmentio/kafka-go/protocol"
	"github.com/segmentio/kafka-go/protocol/metadata"
)

// layout is where things are in a cluster, at one moment.
type layout struct {
	brokers map[int32]string // by node: host:port
	topics  map[string]topicLayout
}

type topicLayout struct {
	code    int16          // an error of the protocol, 0 if none
	id      string         // another if the topic is deleted and created anew; "" in clusters without ids
	leaders map[int32]lead // by partition
}

// lead is who leads a partition, and since which change of leader.
type lead struct {
	node  int32 // -1 while there is none
	epoch int32
}

// metadataVersion is the first with ids of topics (Kafka 2.8).
const metadataVersion = 10

// layout asks the broker about some topics. It does not create them.
func (l *link) layout(ctx context.Context, topics []string) (*layout, error) {
	if l.speaks[protocol.Metadata] < metadataVersion {
		return l.oldLayout(ctx, topics)
	}
	buf, err := l.exchange(ctx, request{key: protocol.Metadata, version: metadataVersion, flexible: true, body: func(b []byte) []byte {
		b = binary.AppendUvarint(b, uint64(len(topics)+1))
		for _, t := range topics {
			b = append(b, make([]byte, 16)...) // no id: by name
			b = appendCompactString(b, t)
			b = append(b, 0) // no tagged fields
		}
		return append(b, 0, 0, 0, 0) // create none, no rights of cluster or topic, no tagged fields
	}}, nil)
	if err != nil {
		return nil, err
	}
	return parseLayout(buf)
}

// parseLayout reads the answer.
//
//	source  Kafka protocol guide, Metadata version 10
func parseLayout(buf []byte) (*layout, error) {
	c := cursor{b: buf}
	out := &layout{brokers: map[int32]string{}, topics: map[string]topicLayout{}}
	c.tags()  // of the header
	c.int32() // throttled
	for range c.compactLength(8) {
		node, host, port := c.int32(), c.compactString(), c.int32()
		c.compactString() // rack
		c.tags()
		out.brokers[node] = net.JoinHostPort(host, strconv.Itoa(int(port)))
	}
	c.compactString() // cluster
	c.int32()         // controller
	for range c.compactLength(24) {
		t := topicLayout{code: c.int16(), leaders: map[int32]lead{}}
		name := c.compactString()
		if id := c.take(16); id != nil && [16]byte(id) != [16]byte{} {
			t.id = base64.RawURLEncoding.EncodeToString(id) // as Kafka's own tools print it
		}
		c.int8() // internal
		for range c.compactLength(18) {
			c.int16() // a partition without a leader has an error, and -1 for leader
			partition := c.int32()
			leader := lead{node: c.int32(), epoch: c.int32()}
			for range 3 { // replicas: all, in sync, offline
				c.take(4 * c.compactLength(4))
			}
			c.tags()
			t.leaders[partition] = leader
		}
		c.int32() // rights
		c.tags()
		out.topics[name] = t
	}
	if c.short {
		return nil, errGarbled
	}
	return out, nil
}

// oldLayout is layout for brokers whose topics have no ids.
func (l *link) oldLayout(ctx context.Context, topics []string) (*layout, error) {
	m, err := l.ask(ctx, &metadata.Request{TopicNames: topics})
	if err != nil {
		return nil, err
	}
	res := m.(*metadata.Response)
	out := &layout{brokers: map[int32]string{}, topics: map[string]topicLayout{}}
	for _, b := range res.Brokers {
		out.brokers[b.NodeID] = net.JoinHostPort(b.Host, strconv.Itoa(int(b.Port)))
	}
	for _, t := range res.Topics {
		into := topicLayout{code: t.ErrorCode, leaders: map[int32]lead{}}
		for _, p := range t.Partitions {
			into.leaders[p.PartitionIndex] = lead{p.LeaderID, p.LeaderEpoch}
		}
		out.topics[t.Name] = into
	}
	return out, nil
}
