package kafka

import (
	"fmt"
	"slices"
	"testing"
	"time"

	"github.com/twmb/franz-go/pkg/kfake"

	"stillwell/stream"
	"stillwell/stream/kafka/kafkatest"
)

// fake starts a cluster in this process, with a client of it and the settings for a source that reads
// harbour.events.
func fake(t testing.TB, partitions int, opts ...kfake.Opt) (*kfake.Cluster, *kafkatest.Client, Config) {
	t.Helper()
	opts = append([]kfake.Opt{kfake.NumBrokers(1), kfake.SeedTopics(int32(partitions), "harbour.events")}, opts...)
	c, err := kfake.NewCluster(opts...)
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(c.Close)
	conf := Config{Brokers: c.ListenAddrs(), Topics: []string{"harbour.events"}, MaxWait: 50 * time.Millisecond, Refresh: 100 * time.Millisecond, longPause: 100 * time.Millisecond}
	return c, kafkatest.NewClient(t, c.ListenAddrs()), conf
}

func TestEveryMessageOfEveryPartitionOnce(t *testing.T) {
	_, cl, conf := fake(t, 3)
	stamp := time.UnixMilli(1_772_000_000_123)
	for p := range 3 {
		cl.Produce("harbour.events", int32(p), numbered(fmt.Sprint("first ", p), 0, 40), stamp)
	}
	to := newRecorder(t)
	s, _ := start(t, conf, to)
	eventually(t, "all caught up with 40", func() bool {
		for p := range 3 {
			if to.look(fmt.Sprint("harbour.events/", p)).caughtUp != 40 {
				return false
			}
		}
		return true
	})
	for p := range 3 {
		cl.Produce("harbour.events", int32(p), numbered(fmt.Sprint("second ", p), 40, 25))
	}
	for p := range 3 {
		name := fmt.Sprint("harbour.events/", p)
		eventually(t, "caught up with 65", func() bool { return to.look(name).caughtUp == 65 })
		got := to.look(name)
		if !slices.Equal(got.offsets(), upTo(0, 65)) {
			t.Errorf("%s: offsets %v", name, got.offsets())
		}
		want := append(texts(numbered(fmt.Sprint("first ", p), 0, 40)), texts(numbered(fmt.Sprint("second ", p), 40, 25))...)
		if !slices.Equal(got.values(), want) {
			t.Errorf("%s: values %q", name, got.values())
		}
		if got.messages[7].stamp != stamp.UnixNano() {
			t.Errorf("%s: stamp %d, want %d", name, got.messages[7].stamp, stamp.UnixNano())
		}
		if len(got.gaps) != 0 || len(got.marks) != 1 || got.marks[0] == "" {
			t.Errorf("%s: gaps %v, marks %q, want none and one", name, got.gaps, got.marks)
		}
		if lag := s.Lag()[name]; lag != 0 {
			t.Errorf("%s: lag %d, want 0", name, lag)
		}
	}
	if want := []string{"harbour.events/0", "harbour.events/1", "harbour.events/2"}; !slices.Equal(to.opened(), want) {
		t.Errorf("opened %q, want %q", to.opened(), want)
	}
}

func TestWhereReadingBegins(t *testing.T) {
	early, late := time.UnixMilli(1_772_000_000_000), time.UnixMilli(1_772_000_900_000)
	for _, tt := range []struct {
		name  string
		from  From
		known map[string]stream.Position
		want  map[string][]int64 // by partition, of 20 messages: 10 early, 10 late; then 5 more
	}{
		{"earliest", Earliest(), nil, map[string][]int64{"/0": upTo(0, 25), "/1": upTo(0, 25)}},
		{"latest", Latest(), nil, map[string][]int64{"/0": upTo(20, 25), "/1": upTo(20, 25)}},
		{"a time", At(late), nil, map[string][]int64{"/0": upTo(10, 25), "/1": upTo(10, 25)}},
		{"a time between", At(early.Add(time.Millisecond)), nil, map[string][]int64{"/0": upTo(10, 25), "/1": upTo(10, 25)}},
		{"a time after all", At(late.Add(time.Hour)), nil, map[string][]int64{"/0": upTo(20, 25), "/1": upTo(20, 25)}},
		{"positions", Latest(), map[string]stream.Position{"/0": {Offset: 7}, "/1": {Offset: 13}}, map[string][]int64{"/0": upTo(7, 25), "/1": upTo(13, 25)}},
		{"a partition that is new since the positions", Latest(), map[string]stream.Position{"/0": {Offset: 7}}, map[string][]int64{"/0": upTo(7, 25), "/1": upTo(0, 25)}},
		{"a position at the end", Earliest(), map[string]stream.Position{"/0": {Offset: 20}, "/1": {Offset: 20}}, map[string][]int64{"/0": upTo(20, 25), "/1": upTo(20, 25)}},
	} {
		t.Run(tt.name, func(t *testing.T) {
			t.Parallel()
			_, cl, conf := fake(t, 2)
			for p := range int32(2) {
				cl.Produce("harbour.events", p, numbered("v", 0, 10), early)
				cl.Produce("harbour.events", p, numbered("v", 10, 10), late)
			}
			conf.From = tt.from
			to := newRecorder(t)
			for name, at := range tt.known {
				to.known["harbour.events"+name] = at
			}
			start(t, conf, to)
			for name := range tt.want {
				eventually(t, "caught up", func() bool { return to.look("harbour.events"+name).caughtUp >= 0 })
			}
			for p := range int32(2) {
				cl.Produce("harbour.events", p, numbered("v", 20, 5), late)
			}
			for name, want := range tt.want {
				eventually(t, "the last", func() bool { return to.look("harbour.events"+name).caughtUp >= len(want) })
				got := to.look("harbour.events" + name)
				if !slices.Equal(got.offsets(), want) || len(got.gaps) > 0 {
					t.Errorf("%s: offsets %v, gaps %v, want %v and none", name, got.offsets(), got.gaps, want)
				}
				if _, known := tt.known[name]; known != (len(got.places) == 0) || !known && got.places[0] != (stream.Position{Offset: want[0], Mark: got.marks[0]}) {
					t.Errorf("%s: announced %v", name, got.places)
				}
			}
		})
	}
}

// Nothing comes between start and stop, then something before the next start: that must not be passed over,
// though reading was to begin at the latest.
func TestRestartOfAQuietPartition(t *testing.T) {
	_, cl, conf := fake(t, 1)
	conf.From = Latest()
	cl.Produce("harbour.events", 0, numbered("old", 0, 10))
	first := newRecorder(t)
	_, stop := start(t, conf, first)
	eventually(t, "caught up", func() bool { return first.look(events0).caughtUp == 0 })
	stop()
	cl.Produce("harbour.events", 0, numbered("new", 0, 3))
	second := newRecorder(t)
	second.known[events0] = first.look(events0).places[0]
	start(t, conf, second)
	eventually(t, "all", func() bool { return second.look(events0).caughtUp == 3 })
	if got := second.look(events0); !slices.Equal(got.values(), texts(numbered("new", 0, 3))) {
		t.Errorf("got %q", got.values())
	}
}

// A checkpoint can be older than the finding of a partition's place. Its position is then the zero one, and
// no offset.
func TestPositionFromBeforeItsPlaceWasFound(t *testing.T) {
	_, cl, conf := fake(t, 1)
	conf.From = Latest()
	cl.Produce("harbour.events", 0, numbered("old", 0, 10))
	to := newRecorder(t)
	to.known[events0] = stream.Position{}
	start(t, conf, to)
	eventually(t, "caught up", func() bool { return to.look(events0).caughtUp >= 0 })
	if got := to.look(events0); len(got.messages) > 0 || got.places[0].Offset != 10 {
		t.Errorf("got %v, announced %v, want to begin at 10", got.values(), got.places)
	}
}

// A chunk holds what a fetch brings unpacked, so the better messages are compressed the less is fetched at a time.
func TestFetchesShrinkWithCompression(t *testing.T) {
	r := reader{src: &Source{conf: Config{MaxBytes: 1 << 20}}}
	for _, tt := range []struct{ fetched, unpacked, want int }{
		{1 << 20, 1 << 20, 1 << 20},         // not compressed
		{1 << 20, 8 << 20, 1 << 17},         // to an eighth
		{1 << 20, 500 << 20, leastFetch},    // to next to nothing
		{100, 100, 1 << 20},                 // the end of the log
		{maxAnswer, 2 * maxAnswer, 1 << 19}, // a batch that is larger than any fetch
	} {
		if r.resize(tt.fetched, tt.unpacked); r.size != tt.want {
			t.Errorf("%d bytes that unpack to %d: next %d, want %d", tt.fetched, tt.unpacked, r.size, tt.want)
		}
	}
	r.src.conf.MaxBytes = 1 << 10
	if r.resize(1<<20, 8<<20); r.size != 1<<10 {
		t.Errorf("next %d, which is more than the settings allow", r.size)
	}
}
