// Package kafka reads topics, partition by partition, and remembers nothing: where to read on is the
// receiver's to know, and what it does not know begins where the settings say.
//
// The daemon takes all partitions itself and is no member of a consumer group. What it commits to a group is
// for other people's lag monitors.
//
// # What comes
//
// Every message of a topic once, in order of offset, as long as it is there: not the markers of transactions,
// and nothing of a transaction that was aborted. A transaction under way is waited for, with all that lies
// behind it. A null value comes as an empty one. Timestamps are those that the topic goes by, the producer's
// or the broker's.
//
// Before its first message, and after each gap, a partition has a chunk without messages: its Base is the
// offset at which reading goes on.
//
// # What goes wrong
//
// A broker that cannot be reached, a leader that moves, a topic that does not exist yet: the source keeps
// trying, at growing intervals, and says so. Only settings that a broker refuses (a wrong password, a
// certificate that does not hold, a topic without the right to read it) end Run, and only if it happens
// before anything has worked.
//
// Messages that were deleted before they were read, a topic made anew, a record batch that cannot be read
// after several tries: a gap, and reading goes on behind it. A topic made anew is told by its id even if its
// offsets fit.
package kafka

import (
	"context"
	"errors"
	"fmt"
	"maps"
	"slices"
	"sync"
	"time"

	kafkago "github.com/segmentio/kafka-go"
	"go.uber.org/zap"
	"golang.org/x/sync/errgroup"

	"stillwell/stream"
)

// A Source reads the topics of one cluster. Its methods may be called from several goroutines.
type Source struct {
	conf    Config
	dialer  *dialer
	cluster *cluster
	buffers *sync.Pool  // of *buffer
	log     *zap.Logger // for what all partitions may say at once

	mu      sync.Mutex
	readers map[string]*reader // by name of partition
}

var _ stream.Source = (*Source)(nil)

// New checks the settings and loads the files they name. It connects to nothing; Run does.
// The error tells of everything that is wrong.
func New(conf Config) (*Source, error) {
	conf = conf.withDefaults()
	errs := []error{conf.check()}
	d := &dialer{clientID: conf.ClientID, limit: conf.DialTimeout, answer: conf.RequestTimeout}
	if conf.TLS != nil {
		var err error
		if d.tls, err = conf.TLS.load(); err != nil {
			errs = append(errs, err)
		}
	}
	if err := errors.Join(errs...); err != nil {
		return nil, err
	}
	if conf.SASL != nil {
		d.sasl, _ = conf.SASL.mechanism() // checked above
		if conf.SASL.Mechanism == "plain" && conf.TLS == nil {
			conf.Log.Warn("the password goes over the network as it is: sasl plain without tls")
		}
	}
	return &Source{
		conf:    conf,
		dialer:  d,
		cluster: newCluster(d, conf.Brokers, conf.Topics),
		buffers: newBuffers(),
		log:     sampled(conf.Log),
		readers: map[string]*reader{},
	}, nil
}

// Run reads until ctx is done, and then returns nil. It fails if the receiver cannot open a partition, or if the
// settings are refused before anything has worked. It is to be called once.
func (s *Source) Run(ctx context.Context, to stream.Receiver) error {
	defer s.cluster.close()
	g, inner := errgroup.WithContext(ctx)
	d := &discovery{Source: s, to: to, g: g, start: true, absent: map[string]time.Time{}}
	g.Go(func() error { return d.run(inner) })
	err := g.Wait()
	if ctx.Err() != nil {
		return nil
	}
	return err
}

// A discovery opens partitions, and looks for new ones now and then.
type discovery struct {
	*Source
	to     stream.Receiver
	g      *errgroup.Group      // runs the readers
	start  bool                 // the cluster has not answered yet
	absent map[string]time.Time // topics that are not there, and when that was last told
}

func (d *discovery) run(ctx context.Context) error {
	lost := trouble{log: d.log, longPause: d.conf.longPause}
	for {
		where, err := d.cluster.layout(ctx, time.Now())
		switch {
		case ctx.Err() != nil:
			return nil
		case err != nil && d.start && refused(err):
			return fmt.Errorf("kafka: %w", err)
		case err != nil:
			if lost.pause(ctx, err) != nil {
				return nil
			}
			continue
		}
		lost.over()
		for _, topic := range d.conf.Topics {
			if err := d.topic(ctx, topic, where.topics[topic]); err != nil {
				return err
			}
		}
		d.start = false
		pause := d.conf.Refresh
		if len(d.absent) > 0 {
			pause = min(pause, time.Second)
		}
		if sleep(ctx, pause) != nil {
			return nil
		}
	}
}

// topic deals with what the cluster says of a topic.
func (d *discovery) topic(ctx context.Context, topic string, where topicLayout) error {
	told, absent := d.absent[topic]
	switch err := kafkago.Error(where.code); {
	case err == kafkago.TopicAuthorizationFailed && d.start:
		return fmt.Errorf("kafka: topic %s: %w: the user needs the rights Describe and Read", topic, err)
	case err != 0:
		if time.Since(told) >= tellEvery {
			d.absent[topic] = time.Now()
			d.conf.Log.Warn("a topic is not there (yet), waiting for it", zap.String("topic", topic), zap.Error(err))
		}
		return nil
	case absent:
		delete(d.absent, topic)
		d.conf.Log.Info("the topic is there", zap.String("topic", topic))
	}
	return d.open(ctx, topic, where)
}

// open starts readers for the partitions of a topic that have none. At the start, partitions of which nothing is known
// begin where the settings say; but one that appears later, or whose siblings are known from before, is new, and is
// read from its beginning.
func (d *discovery) open(ctx context.Context, topic string, where topicLayout) error {
	start := d.start
	var fresh []*reader
	for _, id := range slices.Sorted(maps.Keys(where.leaders)) {
		name := partitionName(topic, id)
		if d.readers[name] != nil { // only this goroutine writes
			continue
		}
		part, at, ok, err := d.to.Open(name)
		if err != nil {
			return fmt.Errorf("kafka: open %s: %w", name, err)
		}
		ok = ok && at != (stream.Position{}) // a checkpoint from before its place was found
		r := newReader(d.Source, d.to, topic, id, part)
		if ok {
			r.placed, r.mark = true, at.Mark
			r.move(at.Offset)
			start = false
		}
		fresh = append(fresh, r)
	}
	for _, r := range fresh {
		if !start {
			r.begin = atEarliest
		}
		d.mu.Lock()
		d.readers[r.part.Name] = r
		d.mu.Unlock()
		d.g.Go(func() error {
			r.run(ctx)
			return nil
		})
	}
	return nil
}

// Lag is, by partition, how many offsets lie between the next to be read and the end of the log as of the
// last answer. Partitions that have not answered yet are not in it.
func (s *Source) Lag() map[string]int64 {
	s.mu.Lock()
	defer s.mu.Unlock()
	out := make(map[string]int64, len(s.readers))
	for name, r := range s.readers {
		if high := r.lag.high.Load(); high >= 0 {
			out[name] = max(high-r.lag.next.Load(), 0)
		}
	}
	return out
}
