package oracle

import (
	"encoding/json"
	"maps"
	"math"
	"slices"
	"strings"
)

// A Reading is the last one of an estimate for an arm and a segment.
type Reading struct {
	Study, Estimate, Contrast, Arm, Baseline, Segment string

	Number                  // over complete units
	Provisional Number      // over all units so far
	Interval    *[2]float64 // for one look; nil: not worked out here
	Heaviest    float64     // NaN: not worked out here
	Endless     bool        // of units that are never complete
	Adjusted    bool
	Series      bool // of time buckets: errors are not worked out here
}

// A Number is a value with its error over some units. What is undefined is NaN.
type Number struct {
	Value, StdError float64
	Units           map[string]int
}

// A Result is all that a finite stream ends with.
type Result struct {
	Last     int64 // the largest event time, Unix nanoseconds
	Stream   Verdicts
	Studies  map[string]Outcomes
	Readings []Reading
	Tied     map[string]bool // studies in which units that entered at one time vie for a segment's place
}

// Evaluate works out a file over partitions of lines, at the end of the stream.
func Evaluate(f *File, parts [][]byte) Result { return Arrive(f, parts).At(math.MaxInt64) }

// A History is all that a stream delivered, so that one can ask for the view at any step.
type History struct {
	file   *File
	events []Event
	stream Verdicts
	last   int64
	mark   int64
}

// Watermark is the least over the partitions, of those that delivered something.
func (h *History) Watermark() int64 { return h.mark }

// Arrive gives every line its verdict.
func Arrive(f *File, parts [][]byte) *History {
	h := &History{file: f}
	h.events, h.stream, h.mark, h.last = f.arrive(parts)
	return h
}

// At is the view as of step T: units complete at or before T, tallied events before T, and
// events that are units at or before T. Any T after the last event asks for the last view.
func (h *History) At(T int64) Result {
	f := h.file
	r := Result{Last: h.last, Stream: h.stream, Studies: map[string]Outcomes{}, Tied: map[string]bool{}}
	if T > h.last {
		T = h.last
	}
	for i := range f.Studies {
		s := &f.Studies[i]
		events := slices.DeleteFunc(slices.Clone(h.events), func(e Event) bool {
			return T < h.last && (e.Time > T || e.Time == T && !s.Events)
		})
		var units []*Unit
		switch {
		case s.Bucket > 0:
			units, r.Studies[s.Name] = s.buckets(events, T)
		case s.Events:
			units, r.Tied[s.Name], r.Studies[s.Name] = s.independent(f, events)
		default:
			units, r.Tied[s.Name], r.Studies[s.Name] = s.keyed(f, events, T)
		}
		r.Readings = append(r.Readings, s.readings(f, units)...)
	}
	return r
}

// readings are everyone's and then those of each segment.
func (s *Study) readings(f *File, units []*Unit) (rs []Reading) {
	segments := map[string][]*Unit{Everyone: units}
	for _, u := range units {
		if u.Segment != "" {
			segments[u.Segment] = append(segments[u.Segment], u)
		}
	}
	for _, name := range slices.Sorted(maps.Keys(segments)) {
		for i := range s.Estimates {
			for _, r := range s.estimate(f, &s.Estimates[i], segments[name]) {
				r.Study, r.Estimate, r.Contrast = s.Name, s.Estimates[i].Name, s.Estimates[i].Contrast
				r.Segment = s.segmentText(name)
				rs = append(rs, r)
			}
		}
	}
	return rs
}

// segmentText is the segment as readings write it.
func (s *Study) segmentText(name string) string {
	m := map[string]string{}
	switch name {
	case Everyone:
	case Pool:
		for _, field := range s.By {
			m[field] = "(others)"
		}
	default:
		for i, text := range strings.Split(name, "\x1f") {
			m[s.By[i]] = text
		}
	}
	b, _ := json.Marshal(m)
	return string(b)
}

// estimate gives the readings of one estimate in one segment.
func (s *Study) estimate(f *File, est *Estimate, units []*Unit) (rs []Reading) {
	all := cellsOf(units)
	complete := all
	if s.Bucket > 0 || s.Events || s.FollowUp > 0 {
		complete = cellsOf(slices.DeleteFunc(slices.Clone(units), func(u *Unit) bool { return !u.Complete }))
	}
	arms := slices.Clone(s.Arms)
	if arms == nil {
		arms = slices.Sorted(maps.Keys(all))
	}
	for _, arm := range arms {
		r := Reading{Arm: arm, Heaviest: math.NaN(), Endless: s.Key != "" && s.FollowUp == 0}
		if est.Contrast == "" {
			r.Number = single(est, complete, arm)
			r.Provisional = single(est, all, arm)
			if s.Bucket > 0 { // their errors are those of a series
				r.StdError, r.Provisional.StdError, r.Series = math.NaN(), math.NaN(), true
			} else {
				r.Interval, r.Heaviest = singleInterval(f.Level, est, complete, arm)
			}
		} else {
			if arm == s.Baseline {
				continue
			}
			r.Baseline = s.Baseline
			var d details
			r.Number, d = compare(est, complete, arm, s.Baseline)
			r.Provisional, _ = compare(est, all, arm, s.Baseline)
			r.Heaviest, r.Adjusted = d.heaviest, len(est.Adjust) > 0
			if est.Contrast == "difference" && est.Of.Plain && !est.absent(complete[arm]) && !est.absent(complete[s.Baseline]) {
				r.Interval = d.interval(f.Level, r.Number)
			}
		}
		r.Value, r.Provisional.Value = defined(r.Value), defined(r.Provisional.Value)
		for _, num := range []*Number{&r.Number, &r.Provisional} {
			if num.StdError = defined(num.StdError); math.IsNaN(num.Value) {
				num.StdError = math.NaN()
			}
		}
		if math.IsNaN(r.Value) {
			r.Heaviest = math.NaN()
		}
		rs = append(rs, r)
	}
	return rs
}

// defined makes what is infinite undefined.
func defined(x float64) float64 {
	if math.IsInf(x, 0) {
		return math.NaN()
	}
	return x
}

// cellsOf puts units into their arms.
func cellsOf(units []*Unit) map[string][]*Unit {
	cells := map[string][]*Unit{}
	for _, u := range units {
		cells[u.Arm] = append(cells[u.Arm], u)
	}
	return cells
}
