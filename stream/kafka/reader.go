package kafka

import (
	"context"
	"errors"
	"fmt"
	"sync"
	"sync/atomic"
	"time"

	kafkago "github.com/segmentio/kafka-go"
	"github.com/segmentio/kafka-go/protocol/listoffsets"
	"go.uber.org/zap"

	"stillwell/stream"
)

// A reader reads one partition, on its own connection to the broker that leads it, for as long as it is let.
type reader struct {
	src   *Source
	to    stream.Receiver
	log   *zap.Logger
	topic string
	id    int32
	part  *stream.Partition

	placed bool   // next is known; else it is found by begin
	begin  int64  // a place in the terms of a ListOffsets request
	next   int64  // offset to read on at
	mark   string // id of the topic in which next counts; "" if unknown
	where  place  // of the connection of now
	size   int    // of a fetch, in bytes

	stale   time.Time // the layout of before is of no use: a leader did not lead, or did not answer
	trouble trouble
	broken  int64 // where a batch cannot be read
	tries   int   // how often that was tried
	decoder decoder
	aborted []aborted

	lag lag
}

// lag is what others may look at while the reader reads.
type lag struct{ next, high atomic.Int64 }

// A buffer holds one answer and its messages, until the receiver gives the chunk back.
type buffer struct {
	data     []byte
	messages []stream.Message
	chunk    stream.Chunk
	release  func()
}

// keepBuffer is the size above which a buffer is not kept for reuse: one huge batch should not occupy memory
// for good.
const keepBuffer = 32 << 20

func newBuffers() *sync.Pool {
	pool := &sync.Pool{}
	pool.New = func() any {
		b := &buffer{}
		b.release = func() {
			if cap(b.data) <= keepBuffer {
				pool.Put(b)
			}
		}
		return b
	}
	return pool
}

func newReader(s *Source, to stream.Receiver, topic string, id int32, part *stream.Partition) *reader {
	r := &reader{src: s, to: to, topic: topic, id: id, part: part, begin: s.conf.From.stamp(), size: s.conf.MaxBytes}
	named := zap.String("partition", part.Name)
	r.log = s.conf.Log.With(named) // every gap is told
	r.trouble = trouble{log: s.log.With(named), longPause: s.conf.longPause}
	r.lag.high.Store(-1)
	return r
}

// run reads until ctx is done. Whatever happens to brokers, it goes on trying.
func (r *reader) run(ctx context.Context) {
	for {
		err := r.connected(ctx)
		if ctx.Err() != nil {
			return
		}
		r.stale = time.Now()
		if r.trouble.pause(ctx, err) != nil {
			return
		}
	}
}

// connected finds the leader and reads from it until something goes wrong.
func (r *reader) connected(ctx context.Context) error {
	where, err := r.find(ctx, r.stale)
	if err != nil {
		return err
	}
	l, err := r.src.dialer.dial(ctx, where.addr)
	if err != nil {
		return err
	}
	defer l.close()
	r.where = where
	if err := r.settle(ctx, l); err != nil {
		return err
	}
	for {
		if err := r.part.Wait(ctx); err != nil {
			return err
		}
		if err := r.read(ctx, l); err != nil {
			return err
		}
		r.trouble.over()
	}
}

// find asks where the partition is, as of since or later. An answer from a broker that has not heard of the
// leader of before is not believed: a leader of old would take us back to messages that were read.
func (r *reader) find(ctx context.Context, since time.Time) (place, error) {
	known, err := r.src.cluster.layout(ctx, since)
	if err != nil {
		return place{}, err
	}
	where, err := known.place(r.topic, r.id)
	if err == nil && where.topic != "" && where.topic == r.where.topic && where.epoch < r.where.epoch {
		err = fmt.Errorf("partition %s: %w: told of leader epoch %d after %d",
			r.part.Name, kafkago.FencedLeaderEpoch, where.epoch, r.where.epoch)
	}
	return where, err
}

// settle makes sure that next is an offset of the topic as it is now.
func (r *reader) settle(ctx context.Context, l *link) error {
	switch {
	case !r.placed:
		at, err := r.offset(ctx, l, r.begin, committed) // a transaction under way is then read as a whole
		if err == nil && at < 0 {                       // nothing as late as that
			at, err = r.offset(ctx, l, atLatest, committed)
		}
		if err != nil {
			return err
		}
		r.placed, r.mark = true, r.where.topic
		r.move(at)
		return r.announce(ctx)
	case r.anew(r.where):
		first, err := r.offset(ctx, l, atEarliest, uncommitted)
		if err != nil {
			return err
		}
		r.mark = r.where.topic
		return r.gap(ctx, first, errAnew.Error())
	}
	return nil
}

// anew tells whether the topic there is another than the one that was read.
func (r *reader) anew(where place) bool {
	return r.mark != "" && where.topic != "" && r.mark != where.topic
}

// read fetches once and hands over what came.
func (r *reader) read(ctx context.Context, l *link) error {
	b := r.src.buffers.Get().(*buffer)
	lent := false
	defer func() {
		if !lent {
			b.release()
		}
	}()
	began := time.Now()
	want := wanted{r.topic, r.id, r.where.epoch, r.next, r.src.conf.MaxWait, r.size}
	f, data, err := l.fetch(ctx, want, b.data, r.aborted)
	b.data, r.aborted = data, f.aborted
	if errors.Is(err, kafkago.OffsetOutOfRange) {
		return r.outOfRange(ctx, l)
	}
	if err != nil {
		return err
	}
	r.mark = r.where.topic
	r.lag.high.Store(f.high)

	d := &r.decoder
	d.messages = b.messages
	d.begin(data, r.next, f.aborted)
	bad := d.batches(f.start, f.end)
	b.data, b.messages = d.data, d.messages
	d.data, d.messages = nil, nil
	r.resize(len(data), len(b.data))
	next, moved := d.next, d.next > r.next
	if len(b.messages) > 0 {
		b.chunk = stream.Chunk{Partition: r.part, Data: b.data, Mark: r.mark, Messages: b.messages, Release: b.release}
		lent = true // by Chunk's failure too: the receiver is going away
		if err := r.to.Chunk(ctx, &b.chunk); err != nil {
			return err
		}
	}
	r.move(next)
	switch {
	case bad != nil:
		return r.damaged(ctx, bad, f.high)
	case r.next == f.high:
		r.to.CaughtUp(r.part)
	case !moved && time.Since(began) < r.src.conf.MaxWait/2:
		return sleep(ctx, firstPause) // nothing, and at once, though there is more: not to be asked in a tight loop
	}
	return nil
}

// leastFetch is how small fetches of well compressed messages become at most: a round trip should be worth its while.
const leastFetch = 64 << 10

// resize sets the size of the next fetch, by how the last one grew when it was unpacked, so that a chunk takes
// about as much memory as the settings allow a fetch.
func (r *reader) resize(fetched, unpacked int) {
	most := r.src.conf.MaxBytes
	r.size = max(min(most*fetched/max(unpacked, 1), most), min(leastFetch, most))
}

func (r *reader) move(next int64) {
	r.next = next
	r.lag.next.Store(next)
}

// gap tells that what lies before to is not to be had, and moves there.
func (r *reader) gap(ctx context.Context, to int64, why string) error {
	r.log.Error("events are missing", zap.Int64("from", r.next), zap.Int64("to", to), zap.String("why", why))
	r.to.Gap(r.part, r.next, to, why)
	r.move(to)
	return r.announce(ctx)
}

// announce tells where reading goes on, by a chunk without messages. A checkpoint can so hold the place of a
// partition from which nothing has come yet; else, after a restart, latest would be later, and a gap would be
// found again.
func (r *reader) announce(ctx context.Context) error {
	return r.to.Chunk(ctx, &stream.Chunk{
		Partition: r.part, Base: r.next, Mark: r.mark, Messages: []stream.Message{}, Release: func() {},
	})
}

// What counts as the end of the log in an offset request.
const (
	uncommitted = 0 // all that is replicated
	committed   = 1 // where the first transaction under way begins
)

// offset asks for the offset of a place in the partition; -1 if a timestamp lies after all that is there.
func (r *reader) offset(ctx context.Context, l *link, place int64, isolation int8) (int64, error) {
	m, err := l.ask(ctx, &listoffsets.Request{ReplicaID: -1, IsolationLevel: isolation, Topics: []listoffsets.RequestTopic{{
		Topic:      r.topic,
		Partitions: []listoffsets.RequestPartition{{Partition: r.id, CurrentLeaderEpoch: r.where.epoch, Timestamp: place}},
	}}})
	if err != nil {
		return 0, err
	}
	res := m.(*listoffsets.Response)
	if len(res.Topics) != 1 || len(res.Topics[0].Partitions) != 1 {
		return 0, fmt.Errorf("broker %s: offsets: %w", l.addr, errGarbled)
	}
	p := res.Topics[0].Partitions[0]
	if p.ErrorCode != 0 {
		return 0, fmt.Errorf("broker %s: offsets: %w", l.addr, kafkago.Error(p.ErrorCode))
	}
	return p.Offset, nil
}

var (
	errAnew  = errors.New("the topic was deleted and created anew")
	errMoved = errors.New("the partition has moved") // to connect again, so that what is known of it is of one piece
)

// outOfRange finds out why next is not to be had, and moves to where reading can go on.
func (r *reader) outOfRange(ctx context.Context, l *link) error {
	where, err := r.find(ctx, time.Now()) // what this connection knows of may be a topic that is no more, or a leader
	if err != nil {
		return err
	}
	if where != r.where || r.anew(where) {
		return errMoved
	}
	first, err := r.offset(ctx, l, atEarliest, uncommitted)
	if err != nil {
		return err
	}
	end, err := r.offset(ctx, l, atLatest, uncommitted)
	if err != nil {
		return err
	}
	switch {
	case r.next < first:
		return r.gap(ctx, first, "deleted by retention before it was read")
	case r.next > end && r.mark != "" && r.mark == where.topic:
		// The same topic, cut back. What was read before stays counted, so it must not be read again.
		return r.gap(ctx, end, "the log was cut back: a broker that had fallen behind became leader")
	case r.next > end:
		r.mark = where.topic
		return r.gap(ctx, first, "the log ends before this offset: the topic was created anew")
	}
	return fmt.Errorf("broker %s: offset %d: %w, though the log reaches from %d to %d",
		l.addr, r.next, kafkago.OffsetOutOfRange, first, end)
}

// damagedTries is how often a batch is fetched before it is given up.
const damagedTries = 3

// damaged deals with a batch that cannot be read. It may come right from another connection or leader; if
// not, it is left out, and told of, rather than blocking all that comes after it.
func (r *reader) damaged(ctx context.Context, err error, high int64) error {
	if r.broken != r.next || r.tries == 0 {
		r.broken, r.tries = r.next, 0
	}
	r.tries++
	if r.tries < damagedTries {
		return fmt.Errorf("the record batch at offset %d cannot be read: %w", r.next, err)
	}
	r.tries = 0
	to := r.next + 1
	var d *damage
	if errors.As(err, &d) && d.last < high {
		to = max(to, d.last+1)
	}
	return r.gap(ctx, to, fmt.Sprintf("the record batch there cannot be read: %v", err))
}
