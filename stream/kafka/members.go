package kafka

import (
	"context"
	"encoding/binary"
	"strings"

	kafkago "github.com/segmentio/kafka-go"
	"github.com/segmentio/kafka-go/protocol"
	"github.com/segmentio/kafka-go/protocol/describegroups"
)

// A member of a group, as the group's coordinator knows it.
type member struct{ id, client, host string }

// members are the live members of a group. Groups are of two kinds: those whose members share out the
// partitions among themselves, and, since Kafka 4.0, those where the broker does. Asked about one kind, a
// broker knows nothing of the other.
func (l *link) members(ctx context.Context, group string) ([]member, error) {
	m, err := l.ask(ctx, &describegroups.Request{Groups: []string{group}})
	if err != nil {
		return nil, err
	}
	var out []member
	for _, g := range m.(*describegroups.Response).Groups {
		if code := kafkago.Error(g.ErrorCode); code != 0 && code != kafkago.GroupIdNotFound {
			return nil, code
		}
		for _, m := range g.Members {
			out = append(out, member{m.MemberID, m.ClientID, strings.TrimPrefix(m.ClientHost, "/")})
		}
	}
	if _, ok := l.speaks[consumerGroupDescribe]; ok && len(out) == 0 {
		return l.newMembers(ctx, group)
	}
	return out, nil
}

// consumerGroupDescribe is not among the messages that the library knows.
const consumerGroupDescribe protocol.ApiKey = 69

func (l *link) newMembers(ctx context.Context, group string) ([]member, error) {
	buf, err := l.exchange(ctx, request{key: consumerGroupDescribe, flexible: true, body: func(b []byte) []byte {
		b = appendCompactString(binary.AppendUvarint(b, 2), group) // one group
		return append(b, 0, 0)                                     // no rights, no tagged fields
	}}, nil)
	if err != nil {
		return nil, err
	}
	return parseMembers(buf)
}

// parseMembers reads the answer about one group.
//
//	source  Kafka protocol guide, ConsumerGroupDescribe version 0
func parseMembers(buf []byte) ([]member, error) {
	c := cursor{b: buf}
	c.tags()  // of the header
	c.int32() // throttled
	var out []member
	for range c.compactLength(20) {
		code := kafkago.Error(c.int16())
		c.compactString() // error message
		c.compactString() // group
		c.compactString() // state
		c.int32()         // epoch
		c.int32()         // epoch of the assignment
		c.compactString() // assignor
		for range c.compactLength(14) {
			m := member{id: c.compactString()}
			c.compactString() // instance
			c.compactString() // rack
			c.int32()         // epoch
			m.client, m.host = c.compactString(), strings.TrimPrefix(c.compactString(), "/")
			for range c.compactLength(1) {
				c.compactString() // topic
			}
			c.compactString() // regular expression of topics
			for range 2 {     // assignment, and the one aimed at
				for range c.compactLength(19) {
					c.take(16)        // topic's id
					c.compactString() // topic
					c.take(4 * c.compactLength(4))
					c.tags()
				}
				c.tags()
			}
			c.tags()
			out = append(out, m)
		}
		c.int32() // rights
		c.tags()
		if code != 0 && code != kafkago.GroupIdNotFound && !c.short {
			return nil, code
		}
	}
	if c.short {
		return nil, errGarbled
	}
	return out, nil
}
