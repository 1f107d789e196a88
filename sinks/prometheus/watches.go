package prometheus

import (
	"slices"

	prom "github.com/prometheus/client_golang/prometheus"

	"stillwell/online"
)

var (
	alarmDesc = prom.NewDesc("stillwell_alarm", "1 while an alarm is raised, 0 where it is not, or withdrawn; allocation checks and silence have a series once they were raised.",
		[]string{"study", "watch", "arm", "segment"}, nil)
	stateDesc = prom.NewDesc("stillwell_watch_state", "1 for the state that a watch is in, 0 for its other ones: waiting, watching, raised, withdrawn.",
		[]string{"study", "watch", "arm", "segment", "state"}, nil)

	states = []string{online.StateWaiting, online.StateWatching, online.StateRaised, online.StateWithdrawn}
)

// standing is where a watch, or whatever else raises alarms, stands.
type standing struct {
	raised bool
	state  string // "" for what is no watch
}

// hear takes in what a watch says. One that is raised has a place whatever the bound: to
// hide an alarm for want of room would be worse than a long page.
func (l *latest) hear(w *online.WatchReading) {
	raised := w.State == online.StateRaised
	l.key = appendKey(l.key[:0], w.Segment, w.Study, w.Watch, w.Arm)
	if at := l.watches.at(l.key, raised || len(w.Segment) == 0); at != nil {
		*at = standing{raised, w.State}
	}
}

// alarm takes in an alarm. A watch's comes with its reading, which names the arm and the
// segment; those of allocation checks and of silence have neither.
func (l *latest) alarm(a *online.Alarm) {
	var arm string
	var seg online.Segment
	if a.Reading != nil {
		arm, seg = a.Reading.Arm, a.Reading.Segment
	}
	l.key = appendKey(l.key[:0], seg, a.Study, a.Watch, arm)
	l.watches.at(l.key, true).raised = a.State == online.StateRaised
}

func collectWatches(rows []row[standing], ch chan<- prom.Metric) {
	for i := range rows {
		r := &rows[i]
		ch <- prom.MustNewConstMetric(alarmDesc, prom.GaugeValue, oneIf(r.v.raised), r.labels...)
		if r.v.state == "" {
			continue
		}
		labels := append(slices.Clone(r.labels), "")
		for _, s := range states {
			labels[len(labels)-1] = s
			ch <- prom.MustNewConstMetric(stateDesc, prom.GaugeValue, oneIf(s == r.v.state), labels...)
		}
	}
}

func oneIf(b bool) float64 {
	if b {
		return 1
	}
	return 0
}
