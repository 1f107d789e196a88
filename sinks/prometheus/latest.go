package prometheus

import (
	"slices"
	"sync"

	prom "github.com/prometheus/client_golang/prometheus"

	"stillwell/online"
)

var droppedDesc = prom.NewDesc("stillwell_series_dropped",
	"Segments of estimates and watches that are on no series, because more came than the page holds.", nil, nil)

// latest is the collector of what the stream said last.
type latest struct {
	mu       sync.Mutex
	key      []byte // room to make keys in
	readings table[values]
	watches  table[standing]
}

func newLatest(max int) *latest {
	return &latest{readings: newTable(max, noValues()), watches: newTable(max, standing{})}
}

func (l *latest) take(o *online.Output) {
	l.mu.Lock()
	defer l.mu.Unlock()
	for i := range o.Latest {
		l.read(&o.Latest[i])
	}
	for i := range o.Alarms {
		l.alarm(&o.Alarms[i])
	}
	for i := range o.Watches {
		l.hear(&o.Watches[i])
	}
}

// Describe names the metrics.
func (l *latest) Describe(ch chan<- *prom.Desc) {
	for i := range columns {
		ch <- columns[i].desc
	}
	ch <- alarmDesc
	ch <- stateDesc
	ch <- droppedDesc
}

// Collect copies the numbers, so that the stream waits for no more than that, and hands
// them out.
func (l *latest) Collect(ch chan<- prom.Metric) {
	readings, watches, dropped := l.copy()
	collectReadings(readings, ch)
	collectWatches(watches, ch)
	ch <- prom.MustNewConstMetric(droppedDesc, prom.GaugeValue, float64(dropped))
}

func (l *latest) copy() (readings []row[values], watches []row[standing], dropped int) {
	l.mu.Lock()
	defer l.mu.Unlock()
	return slices.Clone(l.readings.rows), slices.Clone(l.watches.rows), l.readings.dropped + l.watches.dropped
}
