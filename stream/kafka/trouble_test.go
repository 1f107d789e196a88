package kafka

import (
	"context"
	"encoding/base64"
	"errors"
	"fmt"
	"math/rand/v2"
	"net"
	"slices"
	"strconv"
	"strings"
	"sync"
	"sync/atomic"
	"testing"
	"time"

	"github.com/twmb/franz-go/pkg/kfake"
	"github.com/twmb/franz-go/pkg/kgo"
	"github.com/twmb/franz-go/pkg/kmsg"
	"github.com/twmb/franz-go/pkg/kversion"

	"stillwell/stream"
	"stillwell/stream/kafka/kafkatest"
)

const events0 = "harbour.events/0"

func TestLeaderMoves(t *testing.T) {
	c, cl, conf := fake(t, 1, kfake.NumBrokers(3))
	to := newRecorder(t)
	start(t, conf, to)
	var epoch atomic.Int64 // that the last fetch named
	c.Fault(kfake.Fault{Keys: []kmsg.Key{kmsg.Fetch}, Count: -1, Observe: true, When: func(req kmsg.Request) bool {
		epoch.Store(int64(req.(*kmsg.FetchRequest).Topics[0].Partitions[0].CurrentLeaderEpoch))
		return true
	}})
	for i := range 12 {
		if err := c.MoveTopicPartition("harbour.events", 0, int32(i%3)); err != nil {
			t.Fatal(err)
		}
		cl.Produce("harbour.events", 0, numbered("v", i*10, 10))
		if i%3 == 0 { // now and then it moves while all is quiet
			eventually(t, "caught up", func() bool { return to.look(events0).caughtUp == (i+1)*10 })
		}
	}
	eventually(t, "caught up", func() bool { return to.look(events0).caughtUp == 120 })
	if got := to.look(events0); !slices.Equal(got.offsets(), upTo(0, 120)) || !slices.Equal(got.values(), texts(numbered("v", 0, 120))) || len(got.gaps) > 0 {
		t.Errorf("got %v, gaps %v", got.messages, got.gaps)
	}
	if epoch.Load() != 12 {
		t.Errorf("fetched of leader epoch %d, want 12", epoch.Load())
	}
}

// A cutListener accepts connections that break after a random number of bytes, in the middle of whatever is
// sent.
type cutListener struct {
	net.Listener
	cut *cutter
}

type cutter struct {
	mu   sync.Mutex
	rng  *rand.Rand
	on   bool
	cuts int
}

func (l cutListener) Accept() (net.Conn, error) {
	conn, err := l.Listener.Accept()
	if err != nil {
		return nil, err
	}
	l.cut.mu.Lock()
	defer l.cut.mu.Unlock()
	if !l.cut.on {
		return conn, nil
	}
	return &cutConn{Conn: conn, cut: l.cut, left: 100 + l.cut.rng.IntN(12_000)}, nil
}

type cutConn struct {
	net.Conn
	cut  *cutter
	left int // bytes until it breaks; written by one goroutine
}

func (c *cutConn) Write(b []byte) (int, error) {
	if len(b) <= c.left {
		c.left -= len(b)
		return c.Conn.Write(b)
	}
	n, _ := c.Conn.Write(b[:c.left])
	c.left = 0
	c.Conn.Close()
	c.cut.mu.Lock()
	c.cut.cuts++
	c.cut.mu.Unlock()
	return n, net.ErrClosed
}

// Whatever breaks and whenever, each offset comes once and in order.
func TestRandomDisconnects(t *testing.T) {
	for seed := range uint64(3) {
		t.Run(fmt.Sprint("seed ", seed), func(t *testing.T) {
			t.Parallel()
			rng := rand.New(rand.NewPCG(seed, 7))
			cut := &cutter{rng: rand.New(rand.NewPCG(seed, 8))}
			c, cl, conf := fake(t, 2, kfake.NumBrokers(2), kfake.ListenFn(func(network, address string) (net.Listener, error) {
				l, err := net.Listen(network, address)
				return cutListener{l, cut}, err
			}))
			cl.Produce("harbour.events", 0, numbered("x", 0, 1)) // connected before anything breaks
			cl.Produce("harbour.events", 1, numbered("x", 0, 1))
			cut.mu.Lock()
			cut.on = true
			cut.mu.Unlock()
			conf.MaxBytes = 1 << 12
			to := newRecorder(t)
			start(t, conf, to)
			var made [2]int
			for range 60 {
				p := rng.IntN(2)
				n := 1 + rng.IntN(40)
				cl.Produce("harbour.events", int32(p), numbered(strings.Repeat("v", rng.IntN(100)), made[p], n))
				made[p] += n
				if rng.IntN(10) == 0 {
					c.ShufflePartitionLeaders()
				}
			}
			for p := range 2 {
				name := fmt.Sprint("harbour.events/", p)
				eventually(t, "caught up", func() bool { return to.look(name).caughtUp == made[p]+1 })
				if got := to.look(name); !slices.Equal(got.offsets(), upTo(0, int64(made[p]+1))) || len(got.gaps) > 0 {
					t.Errorf("%s: gaps %v, offsets %v", name, got.gaps, got.offsets())
				}
			}
			cut.mu.Lock()
			defer cut.mu.Unlock()
			if cut.cuts < 5 {
				t.Errorf("only %d connections broke", cut.cuts)
			}
		})
	}
}

func TestPartitionsThatAppear(t *testing.T) {
	_, cl, conf := fake(t, 1)
	conf.From = Latest()
	cl.Produce("harbour.events", 0, numbered("old", 0, 5))
	to := newRecorder(t)
	start(t, conf, to)
	eventually(t, "caught up", func() bool { return to.look(events0).caughtUp == 0 })
	cl.AddPartitions("harbour.events", 3)
	cl.Produce("harbour.events", 2, numbered("v", 0, 8))
	eventually(t, "all of the new one", func() bool { return to.look("harbour.events/2").caughtUp == 8 })
	if got := to.opened(); !slices.Equal(got, []string{events0, "harbour.events/1", "harbour.events/2"}) {
		t.Errorf("opened %q", got)
	}
}

// A topic that is not there is waited for, not made by asking for it.
func TestATopicThatAppears(t *testing.T) {
	c, cl, conf := fake(t, 1, kfake.AllowAutoTopicCreation())
	conf.Topics = []string{"harbour.late", "harbour.events"}
	conf.From = Latest()
	to := newRecorder(t)
	start(t, conf, to)
	eventually(t, "the other one", func() bool { return to.look(events0).caughtUp == 0 })
	time.Sleep(5 * conf.Refresh)
	if n := c.LeaderFor("harbour.late", 0); n != -1 {
		t.Fatal("asking for the topic has made it")
	}
	cl.CreateTopic("harbour.late", 1, nil)
	cl.Produce("harbour.late", 0, numbered("v", 0, 4))
	eventually(t, "the late one", func() bool { return to.look("harbour.late/0").caughtUp == 4 })
}

func TestBrokerThatComesLater(t *testing.T) {
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	addr := l.Addr().String()
	l.Close()
	to := newRecorder(t)
	s, _ := start(t, Config{Brokers: []string{addr}, Topics: []string{"harbour.events"}, MaxWait: 50 * time.Millisecond}, to)
	time.Sleep(300 * time.Millisecond)
	if len(s.Lag()) != 0 {
		t.Errorf("lag %v of a cluster that was never seen", s.Lag())
	}
	port := l.Addr().(*net.TCPAddr).Port
	c, err := kfake.NewCluster(kfake.Ports(port), kfake.NumBrokers(1), kfake.SeedTopics(1, "harbour.events"))
	if err != nil {
		t.Fatal(err)
	}
	defer c.Close()
	eventually(t, "caught up", func() bool { return to.look(events0).caughtUp == 0 })
	c.Close()
	time.Sleep(100 * time.Millisecond)
	before := to.look(events0).confirms
	time.Sleep(200 * time.Millisecond)
	if n := to.look(events0).confirms; n != before {
		t.Errorf("caught up %d times with a broker that is gone", n-before)
	}
}

func TestOnlyCommittedTransactions(t *testing.T) {
	c, cl, conf := fake(t, 1)
	writer := kafkatest.NewClient(t, c.ListenAddrs(), kgo.TransactionalID("tickets"))
	transact := func(prefix string, n int, how kgo.TransactionEndTry) {
		if err := writer.BeginTransaction(); err != nil {
			t.Fatal(err)
		}
		writer.Produce("harbour.events", 0, numbered(prefix, 0, n))
		if err := writer.EndTransaction(context.Background(), how); err != nil {
			t.Fatal(err)
		}
	}
	transact("kept", 3, kgo.TryCommit)                       // 0 to 2, marker 3
	transact("dropped", 4, kgo.TryAbort)                     // 4 to 7, marker 8
	cl.Produce("harbour.events", 0, numbered("plain", 0, 2)) // 9, 10
	if err := writer.BeginTransaction(); err != nil {
		t.Fatal(err)
	}
	writer.Produce("harbour.events", 0, numbered("open", 0, 2)) // 11, 12
	cl.Produce("harbour.events", 0, numbered("behind", 0, 1))   // 13
	to := newRecorder(t)
	s, _ := start(t, conf, to)
	want := []string{"kept 0", "kept 1", "kept 2", "plain 0", "plain 1"}
	eventually(t, "what is decided", func() bool { return len(to.look(events0).messages) >= len(want) })
	time.Sleep(3 * conf.MaxWait)
	got := to.look(events0)
	if !slices.Equal(got.values(), want) || got.caughtUp >= 0 || s.Lag()[events0] != 3 {
		t.Errorf("got %q, caught up %d, lag %v, want %q, never, and 3", got.values(), got.caughtUp, s.Lag(), want)
	}
	if err := writer.EndTransaction(context.Background(), kgo.TryCommit); err != nil { // marker 14
		t.Fatal(err)
	}
	want = append(want, "open 0", "open 1", "behind 0")
	eventually(t, "all", func() bool { return to.look(events0).caughtUp >= len(want) })
	if got := to.look(events0); !slices.Equal(got.values(), want) || !slices.Equal(got.offsets(), []int64{0, 1, 2, 9, 10, 11, 12, 13}) {
		t.Errorf("got %v, want %q", got.messages, want)
	}
	if lag := s.Lag()[events0]; lag != 0 {
		t.Errorf("lag %d, want 0", lag)
	}
}

func TestTombstonesAndCompression(t *testing.T) {
	c, _, conf := fake(t, 1)
	var want []string
	for _, codec := range []kgo.CompressionCodec{kgo.NoCompression(), kgo.GzipCompression(), kgo.SnappyCompression(), kgo.Lz4Compression(), kgo.ZstdCompression()} {
		cl := kafkatest.NewClient(t, c.ListenAddrs(), kgo.ProducerBatchCompression(codec))
		values := append(numbered(strings.Repeat("seat-map ", 50), len(want), 100), nil, []byte{})
		cl.Produce("harbour.events", 0, values)
		want = append(want, texts(values)...)
	}
	conf.MaxBytes = 1 << 10 // a batch at a time
	to := newRecorder(t)
	to.known[events0] = stream.Position{Offset: 50} // inside a batch
	start(t, conf, to)
	eventually(t, "all", func() bool { return to.look(events0).caughtUp >= len(want)-50 })
	if got := to.look(events0); !slices.Equal(got.values(), want[50:]) {
		t.Errorf("got %d values, want %d", len(got.values()), len(want)-50)
	}
}

func TestOldBrokers(t *testing.T) {
	_, cl, conf := fake(t, 1, kfake.MaxVersions(kversion.V2_4_0())) // knows no ids of topics
	cl.Produce("harbour.events", 0, numbered("v", 0, 10))
	to := newRecorder(t)
	to.known[events0] = stream.Position{Offset: 4, Mark: "an id of a cluster that was newer"}
	start(t, conf, to)
	eventually(t, "all", func() bool { return to.look(events0).caughtUp == 6 })
	if got := to.look(events0); len(got.gaps) > 0 || got.marks[0] != "" {
		t.Errorf("gaps %v, marks %q, want none and none", got.gaps, got.marks)
	}

	_, _, conf = fake(t, 1, kfake.MaxVersions(kversion.V1_0_0()))
	s, err := New(conf)
	if err != nil {
		t.Fatal(err)
	}
	if err := s.Run(t.Context(), newRecorder(t)); err == nil || !strings.Contains(err.Error(), "Kafka 2.1") {
		t.Errorf("a broker that is too old: %v", err)
	}
}

func TestOpenFails(t *testing.T) {
	_, _, conf := fake(t, 1)
	to := newRecorder(t)
	to.refuse = errors.New("the checkpoint is broken")
	s, err := New(conf)
	if err != nil {
		t.Fatal(err)
	}
	if err := s.Run(t.Context(), to); !errors.Is(err, to.refuse) || !strings.Contains(err.Error(), events0) {
		t.Errorf("got %v, want it to name the partition and wrap %v", err, to.refuse)
	}
}

// A broker that has not heard of the latest change of leader would send us back to a leader of old.
func TestLeaderOfOldIsNotBelieved(t *testing.T) {
	c, cl, conf := fake(t, 1, kfake.NumBrokers(2))
	cl.Produce("harbour.events", 0, numbered("v", 0, 10))
	for range 3 { // epochs
		for node := range int32(2) {
			if err := c.MoveTopicPartition("harbour.events", 0, node); err != nil {
				t.Fatal(err)
			}
		}
	}
	conf.Refresh = time.Hour
	to := newRecorder(t)
	start(t, conf, to)
	eventually(t, "all", func() bool { return to.look(events0).caughtUp == 10 })
	var lies atomic.Int64
	c.ControlKey(int16(kmsg.Metadata), func(req kmsg.Request) (kmsg.Response, error, bool) {
		c.KeepControl()
		asked := req.(*kmsg.MetadataRequest)
		if asked.Version != metadataVersion || lies.Load() == 5 {
			return nil, nil, false
		}
		lies.Add(1)
		res := asked.ResponseKind().(*kmsg.MetadataResponse)
		for i, addr := range c.ListenAddrs() {
			host, port, _ := net.SplitHostPort(addr)
			n, _ := strconv.Atoi(port)
			res.Brokers = append(res.Brokers, kmsg.MetadataResponseBroker{NodeID: int32(i), Host: host, Port: int32(n)})
		}
		topic := kmsg.NewMetadataResponseTopic()
		topic.Topic, topic.TopicID = kmsg.StringPtr("harbour.events"), idOf(to.look(events0).marks[0])
		topic.Partitions = append(topic.Partitions, kmsg.MetadataResponseTopicPartition{Leader: 0, LeaderEpoch: 1})
		res.Topics = append(res.Topics, topic)
		return res, nil, true
	})
	fetches := c.Fault(kfake.Fault{Keys: []kmsg.Key{kmsg.Fetch}, Count: -1, Observe: true, When: func(req kmsg.Request) bool {
		return lies.Load() > 0 && lies.Load() < 5 && req.(*kmsg.FetchRequest).Topics[0].Partitions[0].CurrentLeaderEpoch == 1
	}})
	if err := c.MoveTopicPartition("harbour.events", 0, 0); err != nil {
		t.Fatal(err)
	}
	cl.Produce("harbour.events", 0, numbered("v", 10, 10))
	eventually(t, "the rest", func() bool { return to.look(events0).caughtUp == 20 })
	if lies.Load() != 5 || fetches.Hits() != 0 {
		t.Errorf("after %d answers of old, %d fetches went to a leader of old", lies.Load(), fetches.Hits())
	}
	if got := to.look(events0); !slices.Equal(got.offsets(), upTo(0, 20)) || len(got.gaps) > 0 {
		t.Errorf("offsets %v, gaps %v", got.offsets(), got.gaps)
	}
}

func idOf(mark string) (id [16]byte) {
	b, _ := base64.RawURLEncoding.DecodeString(mark)
	copy(id[:], b)
	return id
}
