package kafka

import (
	"cmp"
	"context"
	"errors"
	"fmt"
	"net"
	"strconv"
	"strings"

	kafkago "github.com/segmentio/kafka-go"
	"github.com/segmentio/kafka-go/protocol/findcoordinator"
	"github.com/segmentio/kafka-go/protocol/offsetcommit"
	"go.uber.org/zap"
)

// ErrGroupInUse is wrapped by the errors of CheckGroup and Commit when the group has a live member. Kafka
// then takes offsets from members only.
var ErrGroupInUse = errors.New("the group is in use")

// partitionName is how a partition is called in positions and commits. A topic's name holds no slash.
func partitionName(topic string, id int32) string { return topic + "/" + strconv.Itoa(int(id)) }

func parsePartitionName(name string) (topic string, id int32, err error) {
	topic, number, ok := strings.Cut(name, "/")
	n, err := strconv.ParseInt(number, 10, 32)
	if !ok || err != nil || n < 0 || !topicName.MatchString(topic) {
		return "", 0, fmt.Errorf("kafka: partition %q: want topic/number", name)
	}
	return topic, int32(n), nil
}

// Commit writes, by partition ("topic/3"), the offsets to read on at into the group, without being its
// member: for monitors of lag, not for ourselves. It tries again while the cluster is not ready for it, until
// ctx is done. Without a group in the settings it does nothing.
func (s *Source) Commit(ctx context.Context, offsets map[string]int64) error {
	if s.conf.Group == "" || len(offsets) == 0 {
		return nil
	}
	req, err := commitRequest(s.conf.Group, offsets)
	if err != nil {
		return err
	}
	err = s.coordinated(ctx, func(l *link) error {
		m, err := l.ask(ctx, req)
		if err != nil {
			return err
		}
		for _, t := range m.(*offsetcommit.Response).Topics {
			for _, p := range t.Partitions {
				if p.ErrorCode != 0 {
					return fmt.Errorf("%s: %w", partitionName(t.Name, p.PartitionIndex), kafkago.Error(p.ErrorCode))
				}
			}
		}
		return nil
	})
	if err == nil {
		return nil
	}
	for _, code := range []kafkago.Error{
		kafkago.UnknownMemberId, kafkago.IllegalGeneration, kafkago.RebalanceInProgress, kafkago.FencedInstanceID,
		kafkago.UnsupportedVersion, // said of members of the newer kind
	} {
		if errors.Is(err, code) {
			if named := s.CheckGroup(ctx); errors.Is(named, ErrGroupInUse) {
				return named
			}
		}
	}
	return fmt.Errorf("kafka: commit to group %q: %w", s.conf.Group, err)
}

func commitRequest(group string, offsets map[string]int64) (*offsetcommit.Request, error) {
	topics := map[string][]offsetcommit.RequestPartition{}
	for name, at := range offsets {
		topic, id, err := parsePartitionName(name)
		if err != nil {
			return nil, err
		}
		topics[topic] = append(topics[topic], offsetcommit.RequestPartition{
			PartitionIndex: id, CommittedOffset: at, CommittedLeaderEpoch: -1,
		})
	}
	req := &offsetcommit.Request{GroupID: group, GenerationID: -1, RetentionTimeMs: -1}
	for topic, parts := range topics {
		req.Topics = append(req.Topics, offsetcommit.RequestTopic{Name: topic, Partitions: parts})
	}
	return req, nil
}

// CheckGroup fails, wrapping ErrGroupInUse and naming the members, if the group has any: something else then
// reads with our group's name, and commits would be refused. Like Commit it tries until ctx is done.
func (s *Source) CheckGroup(ctx context.Context) error {
	if s.conf.Group == "" {
		return nil
	}
	var in []member
	err := s.coordinated(ctx, func(l *link) (err error) {
		in, err = l.members(ctx, s.conf.Group)
		return err
	})
	if err != nil {
		return fmt.Errorf("kafka: group %q: %w", s.conf.Group, err)
	}
	if len(in) == 0 {
		return nil
	}
	more := ""
	if n := len(in) - 1; n > 0 {
		more = fmt.Sprintf(", and %d more", n)
	}
	return fmt.Errorf("kafka: group %q: %w by member %s (client %s, host %s)%s: "+
		"stop it, or choose another group; a member that died is let go after its session timeout",
		s.conf.Group, ErrGroupInUse, in[0].id, in[0].client, in[0].host, more)
}

// coordinated runs a request at the broker that keeps the group, again and again until it works, is refused
// for good, or ctx is done.
func (s *Source) coordinated(ctx context.Context, do func(*link) error) error {
	t := trouble{log: s.conf.Log.With(zap.String("group", s.conf.Group)), longPause: s.conf.longPause}
	var last error // of the try before: this one may have failed for want of time only
	for {
		err := s.atCoordinator(ctx, do)
		if err == nil || !passing(err) {
			t.over()
			return err
		}
		if ctx.Err() != nil || t.pause(ctx, err) != nil {
			return fmt.Errorf("%w, after %d tries: %w", ctx.Err(), t.tries, cmp.Or(last, err))
		}
		last = err
	}
}

func (s *Source) atCoordinator(ctx context.Context, do func(*link) error) error {
	addrs, err := s.cluster.brokers(ctx)
	if err != nil {
		return err
	}
	any, err := s.dialer.dialAny(ctx, addrs)
	if err != nil {
		return err
	}
	defer any.close()
	m, err := any.ask(ctx, &findcoordinator.Request{Key: s.conf.Group})
	if err != nil {
		return err
	}
	res := m.(*findcoordinator.Response)
	if res.ErrorCode != 0 {
		return fmt.Errorf("coordinator: %w", kafkago.Error(res.ErrorCode))
	}
	addr := net.JoinHostPort(res.Host, strconv.Itoa(int(res.Port)))
	if addr == any.addr {
		return do(any)
	}
	l, err := s.dialer.dial(ctx, addr)
	if err != nil {
		return err
	}
	defer l.close()
	return do(l)
}

// passing tells a failure of the moment from one that would come again.
func passing(err error) bool {
	var code kafkago.Error
	if errors.As(err, &code) {
		switch code {
		case kafkago.GroupLoadInProgress, kafkago.GroupCoordinatorNotAvailable, kafkago.NotCoordinatorForGroup,
			kafkago.RequestTimedOut, kafkago.NetworkException, kafkago.BrokerNotAvailable, kafkago.LeaderNotAvailable:
			return true
		}
		return false
	}
	return !refused(err) // what is left are failures of the network
}
