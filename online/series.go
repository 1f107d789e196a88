package online

import (
	"math"

	"stillwell/online/batch"
	"stillwell/online/boundary"
	"stillwell/online/influence"
	"stillwell/online/wire"
)

// A series follows a group of units through time, for a variance that allows for what
// neighbouring steps have in common: of time buckets one at a time, of other units by whole
// days of completion.
type series struct {
	batches *batch.Series
	day     int64 // units: the day being gathered; NoTime before the first
	units   int64
	sums    []float64
	whole   bool // the day being gathered began with its first hour
}

const wholeDay = int64(24 * 3600 * 1e9)

func newSeries(width int) *series {
	b, err := batch.New(width)
	if err != nil {
		panic(err) // a study has at least one estimate, and so a score
	}
	return &series{batches: b, day: NoTime, sums: make([]float64, width)}
}

// wantsSeries tells whether any estimate rests on a series: of buckets all, of other units
// those without contrast.
func (l *ledger) wantsSeries() bool {
	if l.s.Units.Kind == Buckets {
		return true
	}
	for i := range l.s.Estimates {
		if l.s.Estimates[i].Contrast == NoContrast {
			return l.s.Units.Kind == EventsAlone || l.s.Units.FollowUp > 0
		}
	}
	return false
}

// addUnit takes a completed unit. The day on which the series begins is a fraction, and
// left out.
func (s *series) addUnit(u *unit, buckets bool) {
	if buckets {
		s.batches.Add(1, u.z)
		return
	}
	s.reach(floorDiv(u.At, wholeDay))
	weight := int64(1) << u.Power // as if so many had come that day, all alike
	s.units += weight
	for i, x := range u.z {
		s.sums[i] += float64(weight) * x
	}
}

// reach closes the days before one.
func (s *series) reach(day int64) {
	if s.day == NoTime {
		s.day = day
		return
	}
	for ; s.day < day; s.day++ {
		if s.whole {
			s.batches.Add(s.units, s.sums)
		}
		s.whole = true
		s.units = 0
		clear(s.sums)
	}
}

// lasting is an effect with the variance of its series, for looks at any time.
type lasting struct {
	effect  *influence.Effect
	df      float64
	why     string
	batches int // that the variance is of, and their skewness
	skew    float64
}

// inSeries evaluates an estimate with the variance of its group's series. A window is
// too short for a series of its own: how far dependence inflates the variance of all units so
// far is taken to hold in it too.
func (l *ledger) inSeries(c *comparison, arm influence.Arm) *lasting {
	g := c.groups[0]
	whole, within := arm, c.effect
	if c.e.Window > 0 {
		whole = influence.NewArm(c.name(0), g.cell(true, 0), c.el.inputs)
		within = influence.Single(c.el.of, &whole)
	}
	k := len(c.el.inputs)
	gradient, means := make([]float64, l.l.width), make([]float64, l.l.width)
	inner := make([]float64, k)
	c.el.of.Of.Gradient(whole.Mean, inner)
	for i, comp := range c.el.inputs {
		gradient[comp], means[comp] = inner[i], whole.Mean[i]
	}
	v := g.series.batches.Variance(gradient, means)
	if v.Why != "" {
		return &lasting{why: v.Why}
	}
	// The ratio of the two variances, at the estimate, stands for dependence in every
	// direction: the tests of other values are taken along with it.
	se := within.StdError()
	inflation := v.Variance / (se * se)
	if !(inflation > 0) || math.IsInf(inflation, 0) {
		return &lasting{why: "the units do not vary"}
	}
	arm.Cov, arm.Low = append([]float64(nil), arm.Cov...), append([]float64(nil), arm.Low...)
	for i := range arm.Cov {
		c := inflation * arm.Cov[i] // and what rounding that leaves
		arm.Low[i] = math.FMA(inflation, arm.Cov[i], -c) + inflation*arm.Low[i]
		arm.Cov[i] = c
	}
	arm.Freedom = min(arm.Freedom, v.DF)
	return &lasting{effect: influence.Single(c.el.of, &arm), df: arm.Freedom, batches: v.Batches, skew: v.Skew}
}

// look adds to what a sequence is shown.
func (s *lasting) look(look *boundary.Look, null float64) {
	if s.effect == nil {
		return
	}
	look.StdError = s.effect.StdError()
	look.Z = batch.EquivalentZ(s.effect.Z(null), s.df)
}

// set is the interval at a critical value for z.
func (c *comparison) set(z float64) (lo, hi float64, why string) {
	if c.series == nil {
		return c.effect.Set(z)
	}
	return c.series.effect.Set(studentFor(z, c.series.df))
}

// studentFor is the t with the tail of a z: the inverse of batch.EquivalentZ.
func studentFor(z, df float64) float64 {
	return influence.StudentUpper(math.Erfc(z/math.Sqrt2)/2, df)
}

func (c *comparison) interval(level float64, buckets bool) (lo, hi float64, why string) {
	if c.series != nil && buckets {
		if c.series.why != "" {
			return 0, 0, c.series.why
		}
		return c.series.effect.Interval(level)
	}
	return c.effect.Interval(level)
}

func (s *series) encode(w *wire.Writer) {
	b, _ := s.batches.AppendBinary(nil) // never fails
	w.Bytes(b)
	w.I64(s.day)
	w.I64(s.units)
	w.F64s(s.sums)
	w.Bool(s.whole)
}

func (s *series) decode(r *wire.Reader) {
	b, rest, err := batch.Decode(r.Bytes())
	width := len(s.sums)
	if err != nil || len(rest) > 0 || b.Scores != width {
		r.Fail("batches that cannot be: %v", err)
		return
	}
	s.batches, s.day, s.units, s.sums, s.whole = b, r.I64(), r.I64(), r.F64s(), false
	s.whole = r.Bool()
	if len(s.sums) != width {
		r.Fail("sums of %d components, want %d", len(s.sums), width)
	}
}
