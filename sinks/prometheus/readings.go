package prometheus

import (
	"math"

	prom "github.com/prometheus/client_golang/prometheus"

	"stillwell/online"
)

// A column is one number of a reading, and the metric that shows it.
type column struct {
	desc *prom.Desc
	of   func(*online.Reading) float64 // NaN where the reading lacks it
}

// unitsColumn is the place of stillwell_units among the columns: the one that a baseline has too.
const unitsColumn = 7

var columns = [...]column{
	readingColumn("estimate", "Value of the estimate over complete units, in its own unit; for a contrast, what the arm differs by from the baseline.",
		func(r *online.Reading) float64 { return orNaN(r.Value) }),
	readingColumn("std_error", "Standard error of the estimate, in its unit.",
		func(r *online.Reading) float64 { return orNaN(r.StdError) }),
	readingColumn("anytime_low", "Lower end of the interval that holds at all looks together, in the estimate's unit.",
		func(r *online.Reading) float64 { return end(r.Anytime, 0) }),
	readingColumn("anytime_high", "Upper end of the interval that holds at all looks together, in the estimate's unit.",
		func(r *online.Reading) float64 { return end(r.Anytime, 1) }),
	readingColumn("interval_low", "Lower end of the interval for one look fixed beforehand, in the estimate's unit.",
		func(r *online.Reading) float64 { return end(r.Interval, 0) }),
	readingColumn("interval_high", "Upper end of the interval for one look fixed beforehand, in the estimate's unit.",
		func(r *online.Reading) float64 { return end(r.Interval, 1) }),
	readingColumn("provisional", "Value of the estimate over all units seen so far, complete or not; no series where that is stillwell_estimate.",
		func(r *online.Reading) float64 {
			if r.Provision == nil {
				return math.NaN()
			}
			return orNaN(r.Provision.Value)
		}),
	unitsColumn: readingColumn("units", "Units that the estimate rests on, by the arm they are in; a contrast counts the baseline's too.",
		func(r *online.Reading) float64 {
			for _, c := range r.Units {
				if countsOwn(r, c.Name) {
					return float64(c.N)
				}
			}
			return math.NaN()
		}),
	readingColumn("heaviest_share", "Share of the estimate's variance that the heaviest unit carries alone, from 0 to 1.",
		func(r *online.Reading) float64 { return orNaN(r.Heaviest) }),
	readingColumn("sampling_ratio", "Probability with which units are admitted at present: 1 unless memory was short.",
		func(r *online.Reading) float64 { return r.Sampling }),
}

// values are the numbers of a set of labels, by column; NaN for none.
type values [len(columns)]float64

func readingColumn(name, help string, of func(*online.Reading) float64) column {
	return column{prom.NewDesc("stillwell_"+name, help, []string{"study", "estimate", "contrast", "arm", "segment"}, nil), of}
}

func orNaN(x *float64) float64 {
	if x == nil {
		return math.NaN()
	}
	return *x
}

func end(interval *[2]float64, which int) float64 {
	if interval == nil {
		return math.NaN()
	}
	return interval[which]
}

// countsOwn tells whether a count is of the arm that the reading speaks of. A study without
// arms counts "all", and names no arm.
func countsOwn(r *online.Reading, name string) bool {
	return name == r.Arm || r.Arm == "" && len(r.Units) == 1
}

func noValues() (v values) {
	for i := range v {
		v[i] = math.NaN()
	}
	return v
}

// read takes in a reading. The baseline of one that is kept has its count beside it.
func (l *latest) read(r *online.Reading) {
	l.key = appendKey(l.key[:0], r.Segment, r.Study, r.Estimate, r.Contrast, r.Arm)
	v := l.readings.at(l.key, len(r.Segment) == 0)
	if v == nil {
		return
	}
	for i := range columns {
		v[i] = columns[i].of(r)
	}
	for _, c := range r.Units {
		if countsOwn(r, c.Name) {
			continue
		}
		l.key = appendKey(l.key[:0], r.Segment, r.Study, r.Estimate, r.Contrast, c.Name)
		l.readings.at(l.key, true)[unitsColumn] = float64(c.N)
	}
}

func collectReadings(rows []row[values], ch chan<- prom.Metric) {
	for i := range rows {
		for c, x := range rows[i].v {
			if !math.IsNaN(x) {
				ch <- prom.MustNewConstMetric(columns[c].desc, prom.GaugeValue, x, rows[i].labels...)
			}
		}
	}
}
