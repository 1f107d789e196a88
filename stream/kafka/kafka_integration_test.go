//go:build integration

package kafka

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"os/exec"
	"slices"
	"strings"
	"testing"
	"time"

	kafkago "github.com/segmentio/kafka-go"
	"github.com/twmb/franz-go/pkg/kgo"

	"stillwell/stream"
	"stillwell/stream/kafka/kafkatest"
)

// settings are those of a source that reads a topic of a real broker.
func settings(b *kafkatest.Broker, topic string) Config {
	return Config{Brokers: []string{b.Addr}, Topics: []string{topic}, MaxWait: 100 * time.Millisecond, Refresh: 500 * time.Millisecond}
}

func names(topic string, partitions int) []string {
	var out []string
	for p := range partitions {
		out = append(out, partitionName(topic, int32(p)))
	}
	return out
}

// caughtUp waits until so many messages of a partition have come, and the broker has said that these are all.
func caughtUp(t testing.TB, to *recorder, name string, n int) recorded {
	t.Helper()
	within(t, time.Minute, fmt.Sprintf("%s caught up with %d", name, n), func() bool { return to.look(name).caughtUp >= n })
	return to.look(name)
}

func TestBroker(t *testing.T) {
	b := kafkatest.Start(t, kafkatest.Options{})

	t.Run("drain", func(t *testing.T) {
		b.CreateTopic("harbour.drain", 4, nil)
		for p := range 4 {
			var in bytes.Buffer
			for i := range 5000 {
				fmt.Fprintf(&in, "ticket %d of partition %d\n", i, p)
			}
			produceWith(t, b, "harbour.drain", p, []string{"none", "gzip", "snappy", "lz4"}[p], in.Bytes())
		}
		to := newRecorder(t)
		s, _ := start(t, settings(b, "harbour.drain"), to)
		for p, name := range names("harbour.drain", 4) {
			got := caughtUp(t, to, name, 5000)
			for i, m := range got.messages {
				if want := fmt.Sprintf("ticket %d of partition %d", i, p); m.value != want || m.offset != int64(i) || time.Since(time.Unix(0, m.stamp)) > time.Hour {
					t.Fatalf("%s: message %d is %+v, want %q, of just now", name, i, m, want)
				}
			}
			if len(got.messages) != 5000 || len(got.gaps) > 0 || s.Lag()[name] != 0 {
				t.Errorf("%s: %d messages, gaps %v, lag %v", name, len(got.messages), got.gaps, s.Lag())
			}
		}
	})

	t.Run("partitions added", func(t *testing.T) {
		b.CreateTopic("harbour.wider", 1, nil)
		b.Produce("harbour.wider", 0, numbered("v", 0, 10))
		to := newRecorder(t)
		conf := settings(b, "harbour.wider")
		conf.From = Latest()
		start(t, conf, to)
		caughtUp(t, to, "harbour.wider/0", 0)
		b.AddPartitions("harbour.wider", 3)
		b.Produce("harbour.wider", 2, numbered("v", 0, 10))
		if got := caughtUp(t, to, "harbour.wider/2", 10); !slices.Equal(got.values(), texts(numbered("v", 0, 10))) {
			t.Errorf("got %v", got.values())
		}
		if got := to.look("harbour.wider/0"); len(got.messages) != 0 {
			t.Errorf("from latest on: got %v", got.messages)
		}
	})

	t.Run("trimmed by hand", func(t *testing.T) {
		b.CreateTopic("harbour.trimmed", 1, nil)
		b.Produce("harbour.trimmed", 0, numbered("v", 0, 100))
		b.DeleteRecords("harbour.trimmed", 0, 60)
		to := newRecorder(t)
		to.known["harbour.trimmed/0"] = stream.Position{Offset: 20}
		start(t, settings(b, "harbour.trimmed"), to)
		got := caughtUp(t, to, "harbour.trimmed/0", 40)
		if !slices.Equal(got.offsets(), upTo(60, 100)) || len(got.gaps) != 1 || got.gaps[0].from != 20 || got.gaps[0].to != 60 {
			t.Errorf("offsets %v, gaps %v", got.offsets(), got.gaps)
		}
	})

	t.Run("trimmed by retention", func(t *testing.T) {
		b.CreateTopic("harbour.short", 1, map[string]string{"retention.ms": "3600000", "segment.bytes": "1048576", "file.delete.delay.ms": "100"})
		long := time.Now().Add(-48 * time.Hour)
		fat := bytes.Repeat([]byte("x"), 50_000)
		for range 3 { // more than a segment
			b.Produce("harbour.short", 0, slices.Repeat([][]byte{fat}, 15), long)
		}
		b.Produce("harbour.short", 0, numbered("v", 45, 5))
		to := newRecorder(t)
		to.known["harbour.short/0"] = stream.Position{Offset: 2}
		s := waitForRetention(t, b, "harbour.short", 2)
		start(t, settings(b, "harbour.short"), to)
		got := caughtUp(t, to, "harbour.short/0", int(50-s))
		if len(got.gaps) != 1 || got.gaps[0].from != 2 || got.gaps[0].to != s || got.messages[0].offset != s {
			t.Errorf("gaps %v, first offset %d, want one from 2 to %d", got.gaps, got.messages[0].offset, s)
		}
	})

	t.Run("made anew", func(t *testing.T) {
		b.CreateTopic("harbour.anew", 1, nil)
		b.Produce("harbour.anew", 0, numbered("old", 0, 10))
		to := newRecorder(t)
		start(t, settings(b, "harbour.anew"), to)
		caughtUp(t, to, "harbour.anew/0", 10)
		b.DeleteTopic("harbour.anew")
		time.Sleep(500 * time.Millisecond)
		b.CreateTopic("harbour.anew", 1, nil)
		b.Produce("harbour.anew", 0, numbered("new", 0, 30))
		got := caughtUp(t, to, "harbour.anew/0", 40)
		if want := append(texts(numbered("old", 0, 10)), texts(numbered("new", 0, 30))...); !slices.Equal(got.values(), want) {
			t.Errorf("got %q", got.values())
		}
		if len(got.gaps) != 1 || got.gaps[0].from != 10 || got.gaps[0].to != 0 || len(got.marks) != 2 {
			t.Errorf("gaps %v, marks %q, want one from 10 to 0, and two", got.gaps, got.marks)
		}
	})

	t.Run("asking makes no topic", func(t *testing.T) {
		to := newRecorder(t)
		start(t, settings(b, "harbour.nowhere"), to)
		time.Sleep(2 * time.Second)
		if len(to.opened()) > 0 {
			t.Errorf("opened %q", to.opened())
		}
	})

	t.Run("transactions", func(t *testing.T) { transactions(t, b) })
	t.Run("compacted", func(t *testing.T) { compacted(t, b) })
	t.Run("broker's clock", func(t *testing.T) {
		b.CreateTopic("harbour.clock", 1, map[string]string{"message.timestamp.type": "LogAppendTime"})
		b.Produce("harbour.clock", 0, numbered("v", 0, 10), time.Now().Add(-20*time.Hour))
		to := newRecorder(t)
		start(t, settings(b, "harbour.clock"), to)
		for _, m := range caughtUp(t, to, "harbour.clock/0", 10).messages {
			if age := time.Since(time.Unix(0, m.stamp)); age > time.Minute || age < -time.Minute {
				t.Errorf("message %d is %v old, by the broker's clock", m.offset, age)
			}
		}
	})
	t.Run("group", func(t *testing.T) { group(t, b) })

	t.Run("restarted", func(t *testing.T) { restarted(t, b) }) // last: the others' clients would notice
}

// produceWith lets kcat write lines, or our own client if there is no kcat.
func produceWith(t *testing.T, b *kafkatest.Broker, topic string, partition int, codec string, lines []byte) {
	t.Helper()
	if _, err := exec.LookPath("kcat"); err != nil {
		t.Log("no kcat: franz-go produces")
		var values [][]byte
		for line := range bytes.Lines(lines) {
			values = append(values, bytes.TrimSuffix(line, []byte("\n")))
		}
		b.Produce(topic, int32(partition), values)
		return
	}
	cmd := exec.Command("kcat", "-P", "-b", b.Addr, "-t", topic, "-p", fmt.Sprint(partition), "-z", codec, "-X", "linger.ms=20")
	cmd.Stdin = bytes.NewReader(lines)
	if out, err := cmd.CombinedOutput(); err != nil {
		t.Fatalf("kcat: %v\n%s", err, out)
	}
}

// waitForRetention waits until the log begins after an offset, and returns where.
func waitForRetention(t *testing.T, b *kafkatest.Broker, topic string, after int64) (first int64) {
	t.Helper()
	client := &kafkago.Client{Addr: kafkago.TCP(b.Addr), Transport: &kafkago.Transport{}}
	defer client.Transport.(*kafkago.Transport).CloseIdleConnections()
	within(t, time.Minute, "retention", func() bool {
		time.Sleep(200 * time.Millisecond)
		res, err := client.ListOffsets(t.Context(), &kafkago.ListOffsetsRequest{Topics: map[string][]kafkago.OffsetRequest{topic: {kafkago.FirstOffsetOf(0)}}})
		if err != nil {
			return false
		}
		first = res.Topics[topic][0].FirstOffset
		return first > after
	})
	return first
}

func transactions(t *testing.T, b *kafkatest.Broker) {
	b.CreateTopic("harbour.paid", 1, nil)
	writer := kafkatest.NewClient(t, []string{b.Addr}, kgo.TransactionalID("payments"))
	transact := func(prefix string, how kgo.TransactionEndTry) {
		t.Helper()
		if err := writer.BeginTransaction(); err != nil {
			t.Fatal(err)
		}
		writer.Produce("harbour.paid", 0, numbered(prefix, 0, 10))
		writer.Produce("harbour.paid", 0, numbered(prefix, 10, 10))
		if err := writer.EndTransaction(context.Background(), how); err != nil {
			t.Fatal(err)
		}
	}
	var want []string
	for i := range 5 {
		transact(fmt.Sprint("dropped ", i), kgo.TryAbort)
		transact(fmt.Sprint("kept ", i), kgo.TryCommit)
		b.Produce("harbour.paid", 0, numbered(fmt.Sprint("plain ", i), 0, 3))
		want = append(want, texts(numbered(fmt.Sprint("kept ", i), 0, 20))...)
		want = append(want, texts(numbered(fmt.Sprint("plain ", i), 0, 3))...)
	}
	to := newRecorder(t)
	start(t, settings(b, "harbour.paid"), to)
	if got := caughtUp(t, to, "harbour.paid/0", len(want)); !slices.Equal(got.values(), want) {
		t.Errorf("got %q\nwant %q", got.values(), want)
	}
	if err := writer.BeginTransaction(); err != nil {
		t.Fatal(err)
	}
	writer.Produce("harbour.paid", 0, numbered("late", 0, 2))
	b.Produce("harbour.paid", 0, numbered("behind", 0, 2))
	time.Sleep(time.Second)
	if got := to.look("harbour.paid/0"); len(got.messages) != len(want) {
		t.Errorf("while a transaction is open: got %q", got.values()[len(want):])
	}
	if err := writer.EndTransaction(context.Background(), kgo.TryAbort); err != nil {
		t.Fatal(err)
	}
	want = append(want, "behind 0", "behind 1")
	if got := caughtUp(t, to, "harbour.paid/0", len(want)); !slices.Equal(got.values(), want) {
		t.Errorf("got %q\nwant %q", got.values(), want)
	}
}

// An idempotent producer's batches stay, empty, when compaction has taken all that was in them.
func compacted(t *testing.T, b *kafkatest.Broker) {
	b.CreateTopic("harbour.seats", 1, map[string]string{
		"cleanup.policy": "compact", "min.cleanable.dirty.ratio": "0.01", "segment.ms": "200", "max.compaction.lag.ms": "200", "delete.retention.ms": "0",
	})
	for i := range 10 {
		for _, seat := range []string{"A1", "A2"} {
			b.Write(&kgo.Record{Topic: "harbour.seats", Key: []byte(seat), Value: fmt.Appendf(nil, "%s %d", seat, i)})
		}
	}
	time.Sleep(time.Second)
	b.Write(&kgo.Record{Topic: "harbour.seats", Key: []byte("B1"), Value: []byte("B1 0")}) // rolls the segment
	within(t, time.Minute, "compaction", func() bool {
		time.Sleep(time.Second)
		b.Write(&kgo.Record{Topic: "harbour.seats", Key: []byte("B1"), Value: []byte("B1 n")})
		to := newRecorder(t)
		_, stop := start(t, settings(b, "harbour.seats"), to)
		defer stop()
		got := caughtUp(t, to, "harbour.seats/0", 1)
		if len(got.gaps) > 0 || !slices.IsSorted(got.offsets()) || !slices.Contains(got.values(), "A1 9") || !slices.Contains(got.values(), "A2 9") {
			t.Fatalf("got %v, gaps %v", got.messages, got.gaps)
		}
		return !slices.Contains(got.values(), "A1 0") && !slices.Contains(got.values(), "A2 8")
	})
}

func group(t *testing.T, b *kafkatest.Broker) {
	b.CreateTopic("harbour.group", 2, nil)
	b.Produce("harbour.group", 0, numbered("v", 0, 10))
	conf := settings(b, "harbour.group")
	conf.Group = "tickets"
	s, err := New(conf)
	if err != nil {
		t.Fatal(err)
	}
	ctx, cancel := context.WithTimeout(t.Context(), time.Minute) // the coordinator may not be ready
	defer cancel()
	if err := s.CheckGroup(ctx); err != nil {
		t.Fatal(err)
	}
	if err := s.Commit(ctx, map[string]int64{"harbour.group/0": 7, "harbour.group/1": 0}); err != nil {
		t.Fatal(err)
	}
	if got := b.Committed("tickets"); got["harbour.group/0"] != 7 || got["harbour.group/1"] != 0 {
		t.Errorf("franz-go finds %v committed", got)
	}
	client := &kafkago.Client{Addr: kafkago.TCP(b.Addr), Transport: &kafkago.Transport{}}
	defer client.Transport.(*kafkago.Transport).CloseIdleConnections()
	seen, err := client.ConsumerOffsets(ctx, kafkago.TopicAndGroup{Topic: "harbour.group", GroupId: "tickets"})
	if err != nil || seen[0] != 7 {
		t.Errorf("kafka-go finds %v committed, %v", seen, err)
	}

	// A live member, of the kind that shares out partitions by itself, and of that for which the broker does.
	for i, kind := range [][]kgo.Opt{nil, {kgo.ServerSideBalancer(), kgo.Balancers(kgo.RangeBalancer())}} {
		opts := append(kind, kgo.ConsumerGroup("tickets"), kgo.ConsumeTopics("harbour.group"), kgo.ClientID("night-report"))
		leave := join(t, kafkatest.NewClient(t, []string{b.Addr}, opts...))
		within(t, time.Minute, "a member", func() bool { err = s.CheckGroup(ctx); return err != nil })
		for _, err := range []error{err, s.Commit(ctx, map[string]int64{"harbour.group/0": 8})} {
			if !errors.Is(err, ErrGroupInUse) || !strings.Contains(err.Error(), "client night-report, host 127.0.0.1") {
				t.Errorf("kind %d: got %v, want it to name night-report", i, err)
			}
		}
		leave()
		within(t, time.Minute, "the member has left", func() bool { return s.CheckGroup(ctx) == nil })
		at := int64(9 + i)
		if err := s.Commit(ctx, map[string]int64{"harbour.group/0": at}); err != nil || b.Committed("tickets")["harbour.group/0"] != at {
			t.Errorf("kind %d: after the member has left: %v, %v", i, err, b.Committed("tickets"))
		}
	}
}

func restarted(t *testing.T, b *kafkatest.Broker) {
	b.CreateTopic("harbour.restart", 2, map[string]string{"flush.messages": "1"}) // what was acknowledged outlives the crash
	to := newRecorder(t)
	start(t, settings(b, "harbour.restart"), to)
	made := 0
	produce := func() {
		for p := range int32(2) {
			b.Produce("harbour.restart", p, numbered("v", made, 500))
		}
		made += 500
	}
	for _, end := range []func(){b.Stop, b.Kill, b.Kill} {
		produce() // is being read while the broker goes
		end()
		before := to.look("harbour.restart/0").confirms
		time.Sleep(300 * time.Millisecond)
		if n := to.look("harbour.restart/0").confirms; n != before {
			t.Errorf("caught up %d times with a broker that is gone", n-before)
		}
		b.Restart()
		produce()
	}
	for _, name := range names("harbour.restart", 2) {
		got := caughtUp(t, to, name, made)
		if !slices.Equal(got.offsets(), upTo(0, int64(made))) || len(got.gaps) > 0 {
			t.Errorf("%s: %d messages, gaps %v", name, len(got.messages), got.gaps)
		}
	}
}

func TestSecureBroker(t *testing.T) {
	b := kafkatest.Start(t, kafkatest.Options{Users: map[string]string{"mara": "sea-legs"}})
	b.CreateTopic("harbour.secret", 1, nil)
	b.SecureClient("mara", "sea-legs").Produce("harbour.secret", 0, numbered("v", 0, 20))
	for _, mechanism := range []string{"scram-sha-256", "scram-sha-512"} {
		conf := settings(b, "harbour.secret")
		conf.Brokers = []string{b.Secure}
		conf.TLS = &TLS{CAFile: b.CAFile}
		conf.SASL = &SASL{Mechanism: mechanism, User: "mara", Password: "sea-legs"}
		conf.Group = "tickets"
		to := newRecorder(t)
		s, stop := start(t, conf, to)
		caughtUp(t, to, "harbour.secret/0", 20)
		ctx, cancel := context.WithTimeout(t.Context(), time.Minute)
		if err := s.Commit(ctx, map[string]int64{"harbour.secret/0": 20}); err != nil {
			t.Error(err)
		}
		cancel()
		stop()

		conf.SASL.Password = "seasick"
		s, err := New(conf)
		if err != nil {
			t.Fatal(err)
		}
		if err := s.Run(t.Context(), newRecorder(t)); !errors.Is(err, kafkago.SASLAuthenticationFailed) {
			t.Errorf("%s, wrong password: %v", mechanism, err)
		}
	}
	conf := settings(b, "harbour.secret")
	conf.Brokers = []string{b.Secure}
	conf.TLS = &TLS{CAFile: b.CAFile}
	conf.SASL = &SASL{Mechanism: "plain", User: "mara", Password: "sea-legs"}
	s, err := New(conf)
	if err != nil {
		t.Fatal(err)
	}
	if err := s.Run(t.Context(), newRecorder(t)); err == nil || !strings.Contains(err.Error(), "SCRAM-SHA-512") {
		t.Errorf("a mechanism that is not offered: %v, want it to say which are", err)
	}
}
