package kafka

import (
	"fmt"
	"slices"
	"strings"
	"sync/atomic"
	"testing"
	"time"

	"github.com/twmb/franz-go/pkg/kfake"
	"github.com/twmb/franz-go/pkg/kmsg"

	"stillwell/stream"
)

func TestTrimmedBeforeItWasRead(t *testing.T) {
	_, cl, conf := fake(t, 1)
	cl.Produce("harbour.events", 0, numbered("v", 0, 30))
	cl.DeleteRecords("harbour.events", 0, 12)
	to := newRecorder(t)
	to.known[events0] = stream.Position{Offset: 5}
	start(t, conf, to)
	eventually(t, "caught up", func() bool { return to.look(events0).caughtUp == 18 })
	got := to.look(events0)
	if !slices.Equal(got.offsets(), upTo(12, 30)) || len(got.gaps) != 1 || got.gaps[0].from != 5 || got.gaps[0].to != 12 || !strings.Contains(got.gaps[0].why, "retention") {
		t.Errorf("offsets %v, gaps %v, want 12 to 29 and a gap from 5 to 12", got.offsets(), got.gaps)
	}

	// And again, while the partition is held back.
	got.part.Hold()
	time.Sleep(3 * conf.MaxWait) // a fetch under way may still end
	cl.Produce("harbour.events", 0, numbered("v", 30, 20))
	cl.DeleteRecords("harbour.events", 0, 45)
	before := to.look(events0)
	time.Sleep(3 * conf.MaxWait)
	if now := to.look(events0); len(now.messages) != len(before.messages) || now.confirms != before.confirms {
		t.Errorf("while it was held, %d messages and %d confirmations came", len(now.messages)-len(before.messages), now.confirms-before.confirms)
	}
	seen := before.messages[len(before.messages)-1].offset + 1
	got.part.Free()
	eventually(t, "the last", func() bool { return slices.Contains(to.look(events0).offsets(), 49) })
	if got := to.look(events0); len(got.gaps) != 2 || got.gaps[1].from != seen || got.gaps[1].to != 45 {
		t.Errorf("gaps %v, want a second from %d to 45", got.gaps, seen)
	} else if got.places[1] != (stream.Position{Offset: 45, Mark: got.marks[0]}) {
		t.Errorf("announced %v, want 45 at last", got.places)
	}
}

func TestTopicMadeAnew(t *testing.T) {
	// markOf reads the topic as it is, and returns what a checkpoint would hold.
	markOf := func(t *testing.T, conf Config) string {
		to := newRecorder(t)
		_, stop := start(t, conf, to)
		eventually(t, "caught up", func() bool { return to.look(events0).caughtUp > 0 })
		stop()
		return to.look(events0).marks[0]
	}
	for _, tt := range []struct {
		name     string
		offset   int64
		known    bool // is the topic's id known from before
		anew     int  // messages of the new topic; 0: the topic is still the old one, of 20
		from, to int64
		read     []int64
	}{
		{"shorter now", 18, true, 10, 18, 0, upTo(0, 10)},
		{"longer now", 18, true, 40, 18, 0, upTo(0, 40)}, // the offset exists, but is another's
		{"shorter, id not known", 18, false, 10, 18, 0, upTo(0, 10)},
		{"the same, but cut back", 30, true, 0, 30, 20, upTo(20, 21)},
	} {
		t.Run(tt.name, func(t *testing.T) {
			t.Parallel()
			_, cl, conf := fake(t, 1)
			cl.Produce("harbour.events", 0, numbered("old", 0, 20))
			mark := markOf(t, conf)
			if tt.anew > 0 {
				cl.DeleteTopic("harbour.events")
				cl.CreateTopic("harbour.events", 1, nil)
				cl.Produce("harbour.events", 0, numbered("new", 0, tt.anew))
			}
			if !tt.known {
				mark = ""
			}
			to := newRecorder(t)
			to.known[events0] = stream.Position{Offset: tt.offset, Mark: mark}
			start(t, conf, to)
			eventually(t, "a gap", func() bool { return len(to.look(events0).gaps) > 0 })
			if tt.anew == 0 {
				cl.Produce("harbour.events", 0, numbered("old", 20, 1))
			}
			eventually(t, "all", func() bool { return to.look(events0).caughtUp >= len(tt.read) })
			got := to.look(events0)
			if !slices.Equal(got.offsets(), tt.read) || len(got.gaps) != 1 || got.gaps[0].from != tt.from || got.gaps[0].to != tt.to {
				t.Errorf("offsets %v, gaps %v, want %v and %d to %d", got.offsets(), got.gaps, tt.read, tt.from, tt.to)
			}
			if same := got.marks[0] == mark; tt.known && same != (tt.anew == 0) {
				t.Errorf("mark %q, was %q", got.marks[0], mark)
			}
		})
	}
}

func TestTopicMadeAnewWhileReading(t *testing.T) {
	_, cl, conf := fake(t, 1)
	cl.Produce("harbour.events", 0, numbered("old", 0, 20))
	to := newRecorder(t)
	start(t, conf, to)
	eventually(t, "caught up", func() bool { return to.look(events0).caughtUp == 20 })
	cl.DeleteTopic("harbour.events")
	time.Sleep(3 * conf.MaxWait)
	before := to.look(events0).confirms
	time.Sleep(3 * conf.MaxWait)
	if n := to.look(events0).confirms; n != before {
		t.Errorf("caught up %d times with a topic that is not there", n-before)
	}
	cl.CreateTopic("harbour.events", 1, nil)
	cl.Produce("harbour.events", 0, numbered("new", 0, 30))
	eventually(t, "the new one", func() bool { return to.look(events0).caughtUp == 50 })
	got := to.look(events0)
	if want := append(upTo(0, 20), upTo(0, 30)...); !slices.Equal(got.offsets(), want) || len(got.gaps) != 1 || got.gaps[0].from != 20 || got.gaps[0].to != 0 {
		t.Errorf("offsets %v, gaps %v", got.offsets(), got.gaps)
	}
	if len(got.marks) != 2 {
		t.Errorf("marks %q, want two", got.marks)
	}
}

// answers makes the cluster answer fetches with a batch of our own making at offset 10, so many times. It
// returns how many are left.
func answers(c *kfake.Cluster, batch []byte, times int) *atomic.Int64 {
	var left atomic.Int64
	left.Store(int64(times))
	c.ControlKey(int16(kmsg.Fetch), func(req kmsg.Request) (kmsg.Response, error, bool) {
		c.KeepControl()
		fetch := req.(*kmsg.FetchRequest)
		if left.Load() == 0 || len(fetch.Topics) == 0 || fetch.Topics[0].Partitions[0].FetchOffset != 10 {
			return nil, nil, false
		}
		left.Add(-1)
		res := fetch.ResponseKind().(*kmsg.FetchResponse)
		part := kmsg.NewFetchResponseTopicPartition()
		part.HighWatermark, part.LastStableOffset, part.RecordBatches = 30, 30, batch
		topic := kmsg.NewFetchResponseTopic()
		topic.Topic, topic.Partitions = fetch.Topics[0].Topic, append(topic.Partitions, part)
		res.Topics = append(res.Topics, topic)
		return res, nil, true
	})
	return &left
}

func TestDamagedBatch(t *testing.T) {
	bad := testBatch{base: 10, values: numbered("bad", 0, 6)}.append(nil)
	bad[len(bad)-1] ^= 1
	for _, tt := range []struct {
		times int
		want  []int64
		gaps  int
	}{
		{damagedTries - 1, upTo(10, 30), 0},
		{100, upTo(16, 30), 1},
	} {
		t.Run(fmt.Sprint("times ", tt.times), func(t *testing.T) {
			c, cl, conf := fake(t, 1)
			for i := range 3 {
				cl.Produce("harbour.events", 0, numbered("v", 10*i, 10))
			}
			left := answers(c, bad, tt.times)
			to := newRecorder(t)
			to.known[events0] = stream.Position{Offset: 10}
			start(t, conf, to)
			if tt.times == 100 { // 10 to 15 are given up, then the true batch from 16 on comes
				eventually(t, "a gap", func() bool { return len(to.look(events0).gaps) == 1 })
			}
			eventually(t, "all", func() bool { return to.look(events0).caughtUp >= len(tt.want) })
			got := to.look(events0)
			if !slices.Equal(got.offsets(), tt.want) || len(got.gaps) != tt.gaps {
				t.Fatalf("offsets %v, gaps %v, want %v and %d", got.offsets(), got.gaps, tt.want, tt.gaps)
			}
			if tt.gaps > 0 && (got.gaps[0].from != 10 || got.gaps[0].to != 16 || !strings.Contains(got.gaps[0].why, "checksum")) {
				t.Errorf("gap %v, want 10 to 16 for its checksum", got.gaps[0])
			}
			if n := tt.times - int(left.Load()); n != min(tt.times, damagedTries) {
				t.Errorf("the damaged batch was fetched %d times", n)
			}
		})
	}
}
