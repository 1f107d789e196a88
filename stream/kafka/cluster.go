package kafka

import (
	"context"
	"errors"
	"fmt"
	"math/rand/v2"
	"slices"
	"time"

	kafkago "github.com/segmentio/kafka-go"
)

// A cluster knows the way to its brokers. Its layout is asked for by one goroutine at a time, and shared:
// when a broker goes down, a hundred partitions want to know where to turn, and one question answers them
// all.
type cluster struct {
	dialer *dialer
	seeds  []string
	topics []string

	turn  chan struct{} // holds one token; who has it may touch what follows
	link  *link         // for questions; nil: none open
	asked time.Time     // when the last question was put
	known *layout       // its answer; after a failure the one before; nil: none yet
	err   error         // its failure
}

func newCluster(d *dialer, seeds, topics []string) *cluster {
	c := &cluster{dialer: d, seeds: seeds, topics: topics, turn: make(chan struct{}, 1)}
	c.turn <- struct{}{}
	return c
}

// layout is the cluster's layout as of since or later.
func (c *cluster) layout(ctx context.Context, since time.Time) (*layout, error) {
	if err := c.take(ctx); err != nil {
		return nil, err
	}
	defer c.give()
	if !c.asked.IsZero() && !c.asked.Before(since) {
		if c.err != nil {
			return nil, c.err
		}
		return c.known, nil
	}
	asked := time.Now()
	known, err := c.ask(ctx)
	if ctx.Err() != nil {
		return nil, ctx.Err() // tells nothing about the cluster
	}
	c.asked, c.err = asked, err
	if err != nil {
		return nil, err
	}
	c.known = known
	return known, nil
}

func (c *cluster) take(ctx context.Context) error {
	select {
	case <-c.turn:
		return nil
	case <-ctx.Done():
		return ctx.Err()
	}
}

func (c *cluster) give() { c.turn <- struct{}{} }

func (c *cluster) ask(ctx context.Context) (*layout, error) {
	if c.link != nil {
		if known, err := c.link.layout(ctx, c.topics); err == nil {
			return known, nil
		}
		c.drop()
	}
	l, err := c.dialer.dialAny(ctx, c.addresses())
	if err != nil {
		return nil, err
	}
	c.link = l
	known, err := l.layout(ctx, c.topics)
	if err != nil {
		c.drop()
	}
	return known, err
}

func (c *cluster) drop() {
	if c.link != nil {
		c.link.close()
		c.link = nil
	}
}

// close gives up the connection. The cluster can be asked again.
func (c *cluster) close() {
	<-c.turn
	defer c.give()
	c.drop()
}

// addresses are the brokers as they name themselves, in any order, and then as the settings name them.
func (c *cluster) addresses() []string {
	var out []string
	if c.known != nil {
		for _, addr := range c.known.brokers {
			out = append(out, addr)
		}
	}
	rand.Shuffle(len(out), func(i, j int) { out[i], out[j] = out[j], out[i] })
	for _, addr := range c.seeds {
		if !slices.Contains(out, addr) {
			out = append(out, addr)
		}
	}
	return out
}

// brokers is addresses, for those who have not taken their turn.
func (c *cluster) brokers(ctx context.Context) ([]string, error) {
	if err := c.take(ctx); err != nil {
		return nil, err
	}
	defer c.give()
	return c.addresses(), nil
}

// dialAny connects to the first broker that answers. If none does, the error tells of each.
func (d *dialer) dialAny(ctx context.Context, addrs []string) (*link, error) {
	var errs []error
	for _, addr := range addrs {
		l, err := d.dial(ctx, addr)
		if err == nil {
			return l, nil
		}
		if ctx.Err() != nil {
			return nil, ctx.Err()
		}
		errs = append(errs, err)
	}
	return nil, errors.Join(errs...)
}

// A place is where a partition is to be read.
type place struct {
	addr  string // of the broker that leads it
	epoch int32  // of its leadership: a broker that knows of a later one, or not of this one, will not answer
	topic string // the topic's id; "" if the cluster has none
}

// place finds a partition.
func (l *layout) place(topic string, partition int32) (place, error) {
	t := l.topics[topic]
	if t.code != 0 {
		return place{}, fmt.Errorf("topic %s: %w", topic, kafkago.Error(t.code))
	}
	leader, ok := t.leaders[partition]
	if !ok {
		return place{}, fmt.Errorf("topic %s has no partition %d: %w", topic, partition, kafkago.UnknownTopicOrPartition)
	}
	addr, ok := l.brokers[leader.node]
	if !ok {
		return place{}, fmt.Errorf("partition %s: %w", partitionName(topic, partition), kafkago.LeaderNotAvailable)
	}
	return place{addr: addr, epoch: leader.epoch, topic: t.id}, nil
}
