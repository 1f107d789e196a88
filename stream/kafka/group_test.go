package kafka

import (
	"context"
	"errors"
	"maps"
	"strings"
	"testing"
	"time"

	"github.com/twmb/franz-go/pkg/kerr"
	"github.com/twmb/franz-go/pkg/kfake"
	"github.com/twmb/franz-go/pkg/kgo"
	"github.com/twmb/franz-go/pkg/kmsg"

	"stillwell/stream/kafka/kafkatest"
)

// inGroup is a source that is not run: commits need no reading.
func inGroup(t *testing.T, conf Config, group string) *Source {
	t.Helper()
	conf.Group = group
	s, err := New(conf)
	if err != nil {
		t.Fatal(err)
	}
	return s
}

func TestCommit(t *testing.T) {
	c, cl, conf := fake(t, 2, kfake.NumBrokers(3))
	s := inGroup(t, conf, "tickets")
	if err := s.CheckGroup(t.Context()); err != nil {
		t.Errorf("a group that nobody has used: %v", err)
	}
	for _, at := range []map[string]int64{
		{"harbour.events/0": 12, "harbour.events/1": 7},
		{"harbour.events/1": 9},
		{"harbour.events/0": 5}, // back: after a restart from an older checkpoint
	} {
		if err := s.Commit(t.Context(), at); err != nil {
			t.Fatal(err)
		}
		for name, want := range at {
			if got := cl.Committed("tickets")[name]; got != want {
				t.Errorf("%s: committed %d, want %d", name, got, want)
			}
		}
		c.RehashCoordinators()
	}
	if err := s.Commit(t.Context(), nil); err != nil {
		t.Errorf("nothing to commit: %v", err)
	}
	for _, name := range []string{"harbour.events", "harbour.events/x", "harbour.events/-1", "/3", "a b/3", "harbour.events/1/2"} {
		if err := s.Commit(t.Context(), map[string]int64{name: 1}); err == nil || !strings.Contains(err.Error(), name) {
			t.Errorf("%q as a partition: %v", name, err)
		}
	}
	none := inGroup(t, Config{Brokers: []string{"127.0.0.1:1"}, Topics: conf.Topics}, "")
	if err := errors.Join(none.CheckGroup(t.Context()), none.Commit(t.Context(), map[string]int64{"harbour.events/0": 1})); err != nil {
		t.Errorf("without a group: %v", err)
	}
}

// A fresh cluster is not ready for groups at once.
func TestCommitTriesAgain(t *testing.T) {
	c, cl, conf := fake(t, 1)
	s := inGroup(t, conf, "tickets")
	faults := c.Fault(
		kfake.Fault{Keys: []kmsg.Key{kmsg.FindCoordinator}, Err: kerr.CoordinatorNotAvailable, Count: 2},
		kfake.Fault{Keys: []kmsg.Key{kmsg.OffsetCommit}, Err: kerr.NotCoordinator},
		kfake.Fault{Keys: []kmsg.Key{kmsg.OffsetCommit}, Err: kerr.CoordinatorLoadInProgress},
	)
	want := map[string]int64{"harbour.events/0": 3}
	if err := s.Commit(t.Context(), want); err != nil {
		t.Fatal(err)
	}
	if got := cl.Committed("tickets"); !maps.Equal(got, want) || faults.Hits() != 4 {
		t.Errorf("committed %v after %d faults, want %v after 4", got, faults.Hits(), want)
	}

	c.Fault(kfake.Fault{Keys: []kmsg.Key{kmsg.FindCoordinator}, Err: kerr.CoordinatorNotAvailable, Count: -1})
	ctx, cancel := context.WithTimeout(t.Context(), 300*time.Millisecond)
	defer cancel()
	if err := s.Commit(ctx, want); !errors.Is(err, context.DeadlineExceeded) || !strings.Contains(err.Error(), "Coordinator") {
		t.Errorf("a coordinator that never comes: %v", err)
	}
}

func TestCommitIsRefused(t *testing.T) {
	c, _, conf := fake(t, 1)
	s := inGroup(t, conf, "tickets")
	h := c.Fault(kfake.Fault{Keys: []kmsg.Key{kmsg.OffsetCommit}, Err: kerr.GroupAuthorizationFailed, Count: -1})
	if err := s.Commit(t.Context(), map[string]int64{"harbour.events/0": 3}); err == nil || h.Hits() != 1 {
		t.Errorf("without the right to: %v after %d tries, want an error after 1", err, h.Hits())
	}
}

func TestLiveMember(t *testing.T) {
	for i, kind := range [][]kgo.Opt{nil, {kgo.ServerSideBalancer(), kgo.Balancers(kgo.RangeBalancer())}} {
		c, _, conf := fake(t, 1)
		opts := append(kind, kgo.ConsumerGroup("tickets"), kgo.ConsumeTopics("harbour.events"), kgo.ClientID("night-report"))
		leave := join(t, kafkatest.NewClient(t, c.ListenAddrs(), opts...))
		s := inGroup(t, conf, "tickets")
		var err error
		eventually(t, "a member", func() bool { err = s.CheckGroup(t.Context()); return err != nil })
		for _, err := range []error{err, s.Commit(t.Context(), map[string]int64{"harbour.events/0": 3})} {
			if !errors.Is(err, ErrGroupInUse) || !strings.Contains(err.Error(), "client night-report") || !strings.Contains(err.Error(), "127.0.0.1") {
				t.Errorf("kind %d: got %v, want it to name the member night-report", i, err)
			}
		}
		leave()
		eventually(t, "the member has left", func() bool { return s.CheckGroup(t.Context()) == nil })
		if err := s.Commit(t.Context(), map[string]int64{"harbour.events/0": 3}); err != nil {
			t.Errorf("kind %d: %v", i, err)
		}
	}
}

// join makes a client a member of its group, until leave is called.
func join(t *testing.T, cl *kafkatest.Client) (leave func()) {
	ctx, cancel := context.WithCancel(t.Context())
	done := make(chan struct{})
	go func() {
		defer close(done)
		for ctx.Err() == nil {
			cl.PollFetches(ctx)
		}
	}()
	return func() {
		cancel()
		<-done
		cl.LeaveGroup()
	}
}
