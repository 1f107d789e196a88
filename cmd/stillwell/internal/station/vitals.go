package station

import (
	"context"
	"errors"
	"sync/atomic"
	"time"

	"stillwell/config"
	"stillwell/online"
	"stillwell/sinks/prometheus"
	"stillwell/stream/order"
)

// vitals is how the daemon itself is doing, handed from the stream's goroutine to whoever
// scrapes: a copy now and then, so that neither waits for the other.
type vitals struct {
	sink *prometheus.Sink // nil: nobody asks
	lag  func() map[string]int64
	copy atomic.Pointer[prometheus.Snapshot]
	last time.Time
}

// vitalsEvery is how old what is scraped may be.
const vitalsEvery = 500 * time.Millisecond

var errNotReady = errors.New("the stream has not been opened yet")

// openVitals starts the page of metrics that the file asks for.
func openVitals(cfg *config.Prometheus, opt RunOptions) (*vitals, error) {
	v := &vitals{}
	if cfg == nil {
		return v, nil
	}
	var err error
	if v.sink, err = prometheus.New(prometheus.Config{Listen: cfg.Listen, Log: opt.Log}); err != nil {
		return nil, err
	}
	v.sink.Observe(func() prometheus.Snapshot {
		if s := v.copy.Load(); s != nil {
			return *s
		}
		return prometheus.Snapshot{}
	})
	v.sink.SetHealth(prometheus.Health{
		Live: func() error { return nil },
		Ready: func() error {
			if v.copy.Load() == nil {
				return errNotReady
			}
			return nil
		},
	})
	return v, v.sink.Start()
}

// show hands a step's readings over.
func (v *vitals) show(o online.Output) {
	if v.sink != nil {
		v.sink.Emit(o)
	}
}

// take copies the daemon's numbers, if the last copy is old.
func (v *vitals) take(st *station, now bool) {
	if v.sink == nil || !now && time.Since(v.last) < vitalsEvery {
		return
	}
	v.last = time.Now()
	e, k := st.eng, st.keeper.Stats()
	c := e.counters()
	s := prometheus.Snapshot{
		Stream: map[string]int64{"read": c.Stream.Read, "delivered": c.Stream.Delivered, "malformed": c.Stream.Malformed,
			"late": c.Stream.Late, "duplicate": c.Stream.Duplicate, "ahead": c.Stream.Ahead},
		Studies: map[string]map[string]int64{}, Units: map[string]prometheus.UnitCounts{},
		StepDuration: e.took, CheckpointDuration: k.Duration, CheckpointHeld: k.Held, CheckpointLast: k.Last, CheckpointFailures: k.Failed,
		AuditDifference: st.audit.off,
	}
	for name, o := range c.Studies {
		s.Studies[name] = map[string]int64{"applied": o.Applied, "filtered": o.Filtered, "outside": o.Outside,
			"waiting": o.Waiting, "conflicting": o.Conflicting, "unsampled": o.Unsampled}
	}
	bytes, rows := int64(0), int64(0)
	for i := range e.plan.Studies {
		var u online.UnitsKept
		for _, sh := range e.shards {
			u.Add(sh.Kept(i))
		}
		s.Units[e.plan.Studies[i].Name] = prometheus.UnitCounts{Open: u.Open, Rows: u.Rows}
		bytes, rows = bytes+u.Bytes, rows+u.Rows
	}
	if rows > 0 {
		s.BytesPerUnit = float64(bytes) / float64(rows)
	}
	if w := e.seq.Watermark(); w != order.Never {
		s.Watermark = time.Unix(0, w)
	}
	if n := e.seq.Newest(); n != order.Never {
		s.Newest = time.Unix(0, n)
	}
	if v.lag != nil {
		s.Lag = v.lag()
	}
	v.copy.Store(&s)
}

func (v *vitals) close() error {
	if v.sink == nil {
		return nil
	}
	ctx, cancel := context.WithTimeout(context.Background(), 5*time.Second)
	defer cancel()
	return v.sink.Close(ctx)
}
