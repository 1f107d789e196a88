package prometheus

import (
	"sync/atomic"
	"time"

	prom "github.com/prometheus/client_golang/prometheus"
)

// A Snapshot is how the daemon itself is doing, at one moment. What it leaves at its zero value has
// no series, but for CheckpointFailures.
type Snapshot struct {
	Stream  map[string]int64            // outcome -> events so far
	Studies map[string]map[string]int64 // study -> outcome -> events so far; "waiting" is the number at present

	Watermark time.Time        // event time up to which steps may be evaluated
	Newest    time.Time        // event time of the newest event
	Lag       map[string]int64 // partition -> messages not read yet

	Units        map[string]UnitCounts // by study
	BytesPerUnit float64               // memory

	StepDuration       time.Duration // the last step's evaluation
	CheckpointDuration time.Duration // the last checkpoint, from its beginning until it was durable
	CheckpointHeld     time.Duration // how long of that the stream was held up
	CheckpointLast     time.Time     // when it became durable; zero while there is none
	CheckpointFailures int64         // so far

	AuditDifference map[string]float64 // study -> largest relative difference between sums kept and sums made anew
}

// UnitCounts are the units of a study that are in memory.
type UnitCounts struct {
	Open int64 // being followed
	Rows int64 // open and complete ones with a row
}

// outcomeWaiting is the one outcome that events leave again, for another.
const outcomeWaiting = "waiting"

func vital(name, help string, labels ...string) *prom.Desc {
	return prom.NewDesc("stillwell_"+name, help, labels, nil)
}

var vitalDescs = struct {
	stream, study, waiting                *prom.Desc
	watermark, newest, lag, behind        *prom.Desc
	open, rows, bytes                     *prom.Desc
	step, checkpoint, held, age, failures *prom.Desc
	audit                                 *prom.Desc
}{
	stream:     vital("stream_events_total", "Events of the stream, by what became of them. The other outcomes add up to \"read\".", "outcome"),
	study:      vital("study_events_total", "Delivered events, by what each study made of them. With those waiting they add up to the stream's delivered ones.", "study", "outcome"),
	waiting:    vital("study_events_waiting", "Events held for a unit that may yet enter the study.", "study"),
	watermark:  vital("watermark_seconds", "Event time up to which the stream is taken to be complete, in seconds since the epoch."),
	newest:     vital("newest_event_seconds", "Event time of the newest event, in seconds since the epoch."),
	lag:        vital("lag_seconds", "How far the watermark is behind the clock."),
	behind:     vital("partition_lag_messages", "Messages of a partition that are still to be read.", "partition"),
	open:       vital("study_units_open", "Units of a study that are being followed.", "study"),
	rows:       vital("study_unit_rows", "Units of a study with a row in memory, open or complete.", "study"),
	bytes:      vital("bytes_per_unit", "Memory a unit takes, averaged over studies."),
	step:       vital("step_duration_seconds", "How long the evaluation of the last step took."),
	checkpoint: vital("checkpoint_duration_seconds", "How long the last checkpoint took, until it was durable."),
	held:       vital("checkpoint_held_seconds", "How long the last checkpoint held up the stream."),
	age:        vital("checkpoint_age_seconds", "Time since the last checkpoint became durable."),
	failures:   vital("checkpoint_failures_total", "Checkpoints that could not be written."),
	audit:      vital("audit_difference", "Largest relative difference between a study's sums as kept and as made anew from its rows. Anything but nil to the last digits is a fault.", "study"),
}

// vitals is the collector of the daemon's own metrics: it asks for them when it is scraped.
type vitals struct {
	now func() time.Time
	ask atomic.Pointer[func() Snapshot]
}

func (v *vitals) observe(f func() Snapshot) {
	if f == nil {
		v.ask.Store(nil)
		return
	}
	v.ask.Store(&f)
}

// Describe names the metrics.
func (v *vitals) Describe(ch chan<- *prom.Desc) {
	d := &vitalDescs
	for _, desc := range []*prom.Desc{d.stream, d.study, d.waiting, d.watermark, d.newest, d.lag, d.behind, d.open, d.rows,
		d.bytes, d.step, d.checkpoint, d.held, d.age, d.failures, d.audit} {
		ch <- desc
	}
}

// Collect asks for a snapshot and hands it out.
func (v *vitals) Collect(ch chan<- prom.Metric) {
	ask := v.ask.Load()
	if ask == nil {
		return
	}
	s := (*ask)()
	d, out := &vitalDescs, page(ch)
	for outcome, n := range s.Stream {
		out.counter(d.stream, n, outcome)
	}
	for study, outcomes := range s.Studies {
		for outcome, n := range outcomes {
			if outcome == outcomeWaiting {
				out.gauge(d.waiting, float64(n), study)
			} else {
				out.counter(d.study, n, study, outcome)
			}
		}
	}
	if !s.Watermark.IsZero() {
		out.gauge(d.watermark, seconds(s.Watermark))
		out.gauge(d.lag, v.now().Sub(s.Watermark).Seconds())
	}
	if !s.Newest.IsZero() {
		out.gauge(d.newest, seconds(s.Newest))
	}
	for partition, n := range s.Lag {
		out.gauge(d.behind, float64(n), partition)
	}
	for study, n := range s.Units {
		out.gauge(d.open, float64(n.Open), study)
		out.gauge(d.rows, float64(n.Rows), study)
	}
	if s.BytesPerUnit != 0 {
		out.gauge(d.bytes, s.BytesPerUnit)
	}
	if s.StepDuration != 0 {
		out.gauge(d.step, s.StepDuration.Seconds())
	}
	if !s.CheckpointLast.IsZero() {
		out.gauge(d.checkpoint, s.CheckpointDuration.Seconds())
		out.gauge(d.held, s.CheckpointHeld.Seconds())
		out.gauge(d.age, v.now().Sub(s.CheckpointLast).Seconds())
	}
	out.counter(d.failures, s.CheckpointFailures)
	for study, x := range s.AuditDifference {
		out.gauge(d.audit, x, study)
	}
}

// seconds is a time as Prometheus has it.
func seconds(t time.Time) float64 { return float64(t.UnixMilli()) / 1e3 }

// page takes metrics whose labels may be any text.
type page chan<- prom.Metric

func (p page) gauge(d *prom.Desc, x float64, labels ...string) { p.put(d, prom.GaugeValue, x, labels) }

func (p page) counter(d *prom.Desc, n int64, labels ...string) {
	p.put(d, prom.CounterValue, float64(n), labels)
}

func (p page) put(d *prom.Desc, t prom.ValueType, x float64, labels []string) {
	for i := range labels {
		labels[i] = label(labels[i])
	}
	p <- prom.MustNewConstMetric(d, t, x, labels...)
}
