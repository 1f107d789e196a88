// Package kafkatest is for tests that need Kafka: a client of another make than the one under test, to
// produce, to change topics and to look at what is committed, and a real broker in a process of its own.
package kafkatest

import (
	"context"
	"strconv"
	"testing"
	"time"

	"github.com/twmb/franz-go/pkg/kerr"
	"github.com/twmb/franz-go/pkg/kgo"
	"github.com/twmb/franz-go/pkg/kmsg"
)

// A Client talks to any cluster. What goes wrong fails the test.
type Client struct {
	t testing.TB
	*kgo.Client
}

// patience is for one request, a broker's start included.
const patience = 60 * time.Second

// NewClient connects to the cluster at addrs, "host:port". It is closed with the test.
func NewClient(t testing.TB, addrs []string, opts ...kgo.Opt) *Client {
	t.Helper()
	opts = append([]kgo.Opt{
		kgo.SeedBrokers(addrs...),
		kgo.RecordPartitioner(kgo.ManualPartitioner()),
		kgo.ProducerBatchCompression(kgo.NoCompression()),
		kgo.ProducerLinger(0),
		kgo.MetadataMinAge(50 * time.Millisecond),
	}, opts...)
	cl, err := kgo.NewClient(opts...)
	if err != nil {
		t.Fatalf("client of %v: %v", addrs, err)
	}
	t.Cleanup(cl.Close)
	return &Client{t: t, Client: cl}
}

// CreateTopic makes a topic. Its settings, such as cleanup.policy, may be nil.
func (c *Client) CreateTopic(name string, partitions int, settings map[string]string) {
	c.t.Helper()
	topic := kmsg.NewCreateTopicsRequestTopic()
	topic.Topic, topic.NumPartitions, topic.ReplicationFactor = name, int32(partitions), 1
	for k, v := range settings {
		set := kmsg.NewCreateTopicsRequestTopicConfig()
		set.Name, set.Value = k, kmsg.StringPtr(v)
		topic.Configs = append(topic.Configs, set)
	}
	req := kmsg.NewPtrCreateTopicsRequest()
	req.Topics = append(req.Topics, topic)
	c.do("create topic "+name, func(ctx context.Context) int16 {
		res, err := req.RequestWith(ctx, c.Client)
		if err != nil || len(res.Topics) != 1 {
			c.t.Fatalf("create topic %s: %v", name, err)
		}
		return res.Topics[0].ErrorCode
	})
	c.await(name, partitions)
}

// DeleteTopic deletes a topic. Brokers take a moment to forget it.
func (c *Client) DeleteTopic(name string) {
	c.t.Helper()
	topic := kmsg.NewDeleteTopicsRequestTopic()
	topic.Topic = kmsg.StringPtr(name)
	req := kmsg.NewPtrDeleteTopicsRequest()
	req.TopicNames, req.Topics = []string{name}, append(req.Topics, topic)
	c.do("delete topic "+name, func(ctx context.Context) int16 {
		res, err := req.RequestWith(ctx, c.Client)
		if err != nil || len(res.Topics) != 1 {
			c.t.Fatalf("delete topic %s: %v", name, err)
		}
		return res.Topics[0].ErrorCode
	})
	c.PurgeTopicsFromClient(name) // else the next record would still look for the old one
}

// AddPartitions makes a topic have so many partitions in all.
func (c *Client) AddPartitions(name string, total int) {
	c.t.Helper()
	topic := kmsg.NewCreatePartitionsRequestTopic()
	topic.Topic, topic.Count = name, int32(total)
	req := kmsg.NewPtrCreatePartitionsRequest()
	req.Topics = append(req.Topics, topic)
	c.do("add partitions to "+name, func(ctx context.Context) int16 {
		res, err := req.RequestWith(ctx, c.Client)
		if err != nil || len(res.Topics) != 1 {
			c.t.Fatalf("add partitions to %s: %v", name, err)
		}
		return res.Topics[0].ErrorCode
	})
	c.await(name, total)
	c.PurgeTopicsFromClient(name) // so that the next record looks again
}

// await waits until brokers know of so many partitions, and of a leader for each.
func (c *Client) await(name string, partitions int) {
	c.t.Helper()
	topic := kmsg.NewMetadataRequestTopic()
	topic.Topic = kmsg.StringPtr(name)
	req := kmsg.NewPtrMetadataRequest()
	req.Topics = append(req.Topics, topic)
	c.do("partitions of "+name, func(ctx context.Context) int16 {
		res, err := req.RequestWith(ctx, c.Client)
		if err != nil || len(res.Topics) != 1 {
			c.t.Fatalf("partitions of %s: %v", name, err)
		}
		led := 0
		for _, p := range res.Topics[0].Partitions {
			if p.Leader >= 0 {
				led++
			}
		}
		if led != partitions {
			return kerr.LeaderNotAvailable.Code
		}
		return 0
	})
}

// DeleteRecords removes what lies before an offset, as retention does.
func (c *Client) DeleteRecords(topic string, partition int32, before int64) {
	c.t.Helper()
	part := kmsg.NewDeleteRecordsRequestTopicPartition()
	part.Partition, part.Offset = partition, before
	of := kmsg.NewDeleteRecordsRequestTopic()
	of.Topic, of.Partitions = topic, append(of.Partitions, part)
	req := kmsg.NewPtrDeleteRecordsRequest()
	req.Topics = append(req.Topics, of)
	c.do("delete records of "+topic, func(ctx context.Context) int16 {
		res, err := req.RequestWith(ctx, c.Client)
		if err != nil || len(res.Topics) != 1 || len(res.Topics[0].Partitions) != 1 {
			c.t.Fatalf("delete records of %s: %v", topic, err)
		}
		return res.Topics[0].Partitions[0].ErrorCode
	})
}

// do repeats a request while the cluster is not ready for it.
func (c *Client) do(what string, request func(context.Context) int16) {
	c.t.Helper()
	ctx, cancel := context.WithTimeout(context.Background(), patience)
	defer cancel()
	for {
		err := kerr.ErrorForCode(request(ctx))
		if err == nil {
			return
		}
		if !kerr.IsRetriable(err) || ctx.Err() != nil {
			c.t.Fatalf("%s: %v", what, err)
		}
		time.Sleep(100 * time.Millisecond)
	}
}

// Produce writes values to one partition and waits until they are in. Timestamps are those given, in order;
// the last holds for the rest; now if there are none. A nil value is a tombstone.
func (c *Client) Produce(topic string, partition int32, values [][]byte, stamps ...time.Time) {
	c.t.Helper()
	records := make([]*kgo.Record, len(values))
	for i, v := range values {
		records[i] = &kgo.Record{Topic: topic, Partition: partition, Value: v}
		if n := len(stamps); n > 0 {
			records[i].Timestamp = stamps[min(i, n-1)]
		}
	}
	c.Write(records...)
}

// Write produces records and waits until they are in.
func (c *Client) Write(records ...*kgo.Record) {
	c.t.Helper()
	ctx, cancel := context.WithTimeout(context.Background(), patience)
	defer cancel()
	if err := c.ProduceSync(ctx, records...).FirstErr(); err != nil {
		c.t.Fatalf("produce: %v", err)
	}
}

// Committed is what a group has committed, by "topic/partition".
func (c *Client) Committed(group string) map[string]int64 {
	c.t.Helper()
	of := kmsg.NewOffsetFetchRequestGroup()
	of.Group = group
	req := kmsg.NewPtrOffsetFetchRequest()
	req.Groups = append(req.Groups, of)
	out := map[string]int64{}
	c.do("offsets of "+group, func(ctx context.Context) int16 {
		res, err := req.RequestWith(ctx, c.Client)
		if err != nil || len(res.Groups) != 1 {
			c.t.Fatalf("offsets of %s: %v", group, err)
		}
		for _, t := range res.Groups[0].Topics {
			for _, p := range t.Partitions {
				out[t.Topic+"/"+strconv.Itoa(int(p.Partition))] = p.Offset
			}
		}
		return res.Groups[0].ErrorCode
	})
	return out
}
