// Package batch estimates the variance of a mean over a series whose steps depend on
// each other: time buckets, or the days of an estimate that no randomised comparison
// clears of the days' own shocks. The series is cut into 64 to 128 batches of equal
// numbers of steps, whose lengths double as it grows, until what depends on each
// other lies mostly within a batch; what is left between neighbours is allowed for.
//
// With a declared season a step is a whole period, or the season is taken out first:
// a batch that is a fraction of a period would take the season for chance.
package batch

import (
	"fmt"
	"math"
	"slices"
)

const (
	Least          = 64  // full batches from which a variance is given
	Most           = 128 // at which neighbours are joined
	MaxCorrelation = 0.3 // between neighbouring batches, from which none is given
)

// Series holds the batches. It depends on the order of its steps and can only be
// added to. All fields are its state, for storing.
type Series struct {
	Scores int       // components of a score vector
	Size   int64     // steps in a full batch: a power of 2
	Units  []int64   // of each full batch
	Sums   []float64 // score sums of each full batch, Scores apiece
	Open   Open
}

// Open is the batch being filled. Its sums are compensated, High + Low: a batch can grow long.
type Open struct {
	Steps, Units int64
	High, Low    []float64
}

// New returns an empty series of vectors of so many scores. It fails below 1.
func New(scores int) (*Series, error) {
	if scores < 1 {
		return nil, fmt.Errorf("batch: %d scores, want 1 or more", scores)
	}
	return &Series{Scores: scores, Size: 1, Open: newOpen(scores)}, nil
}

func newOpen(scores int) Open {
	return Open{High: make([]float64, scores), Low: make([]float64, scores)}
}

// Add takes one step: how many units it has, which may be none, and the sums of their
// scores, finite.
//
//	cost  O(scores), and O(scores Most) where batches are joined; a few allocations a batch
func (s *Series) Add(units int64, sums []float64) {
	if len(sums) != s.Scores || units < 0 {
		panic(fmt.Sprintf("batch: %d units with %d scores added to a series of %d", units, len(sums), s.Scores))
	}
	o := &s.Open
	o.Steps++
	o.Units += units
	for i, x := range sums {
		// Neumaier 1974, ZAMM 54:39.
		t := o.High[i] + x
		if math.Abs(o.High[i]) >= math.Abs(x) {
			o.Low[i] += (o.High[i] - t) + x
		} else {
			o.Low[i] += (x - t) + o.High[i]
		}
		o.High[i] = t
	}
	if o.Steps == s.Size {
		s.close()
	}
}

// close turns the open batch into a full one, and joins neighbours where there are too many.
func (s *Series) close() {
	s.Units = append(s.Units, s.Open.Units)
	for i, x := range s.Open.High {
		s.Sums = append(s.Sums, x+s.Open.Low[i])
	}
	s.Open.Steps, s.Open.Units = 0, 0
	clear(s.Open.High)
	clear(s.Open.Low)
	if len(s.Units) < Most {
		return
	}
	for b := range Most / 2 {
		s.Units[b] = s.Units[2*b] + s.Units[2*b+1]
		for i := range s.Scores {
			s.Sums[b*s.Scores+i] = s.Sums[2*b*s.Scores+i] + s.Sums[(2*b+1)*s.Scores+i]
		}
	}
	s.Units, s.Sums = s.Units[:Most/2], s.Sums[:Most/2*s.Scores]
	s.Size *= 2
}

// Steps returns the number of steps added.
func (s *Series) Steps() int64 { return int64(len(s.Units))*s.Size + s.Open.Steps }

// An Estimate is what the batches say of one functional of the score means.
type Estimate struct {
	Variance    float64 // of the functional; NaN where Why is not ""
	DF          float64 // degrees of freedom of Variance
	Batches     int     // full ones
	Correlation float64 // between neighbouring batches; NaN below 3 of them, or where they do not vary
	Skew        float64 // of the batches' influence totals; NaN where they do not vary
	Why         string  // why there is no variance, "" if there is
}

// Variance returns the variance of a functional of the score means over all units,
// given its gradient at the means. With influence totals of the batches
// psi_b = gradient (sum_b - units_b means), of sample variance s^2 and correlation r1
// between neighbours, it is
//
//	s^2 (steps/size) / units^2 * (1 + r)/(1 - r),   r = max(0, r1 + 1/sqrt(batches))
//
// on batches - 1 degrees of freedom: r errs upwards by one standard error of r1, since
// what is left between batches is seen poorly. None is given below Least
// batches, and while r1 >= MaxCorrelation: the batches are then shorter than
// what depends on each other, and doubling will mend it.
//
//	in    as many components as scores; means over all units added
//	cost  O(scores Most), no allocation but for a reason
func (s *Series) Variance(gradient, means []float64) Estimate {
	if len(gradient) != s.Scores || len(means) != s.Scores {
		panic(fmt.Sprintf("batch: gradient of %d and %d means for %d scores", len(gradient), len(means), s.Scores))
	}
	e := Estimate{Variance: math.NaN(), DF: math.NaN(), Batches: len(s.Units), Correlation: math.NaN(), Skew: math.NaN()}
	var psi [Most]float64
	mean, units := 0.0, s.Open.Units
	for b, n := range s.Units {
		for i, g := range gradient {
			psi[b] += g * (s.Sums[b*s.Scores+i] - float64(n)*means[i])
		}
		mean += psi[b] / float64(e.Batches)
		units += n
	}
	var squares, cubes, neighbours float64
	for b := range e.Batches {
		psi[b] -= mean
		squares += psi[b] * psi[b]
		cubes += psi[b] * psi[b] * psi[b]
		if b > 0 {
			neighbours += psi[b-1] * psi[b]
		}
	}
	if e.Batches >= 3 && squares > 0 {
		e.Correlation = neighbours / squares
	}
	if n := float64(e.Batches); squares > 0 {
		e.Skew = cubes / n / math.Pow(squares/n, 1.5)
	}
	switch {
	case e.Batches < Least:
		e.Why = fmt.Sprintf("not yet: %d of the %d batches that a variance of dependent steps asks for", e.Batches, Least)
	case !(units > 0) || !(squares > 0):
		e.Why = "not yet: the batches do not vary"
	case !(e.Correlation < MaxCorrelation):
		e.Why = fmt.Sprintf("not yet: neighbouring batches of %d steps still depend on each other (correlation %.2f, below %g is asked for)",
			s.Size, e.Correlation, MaxCorrelation)
	default:
		batches := float64(e.Batches)
		r := math.Max(0, e.Correlation+1/math.Sqrt(batches))
		total := squares / (batches - 1) * float64(s.Steps()) / float64(s.Size)
		e.Variance = total / (float64(units) * float64(units)) * (1 + r) / (1 - r)
		e.DF = batches - 1
	}
	return e
}

// Clone returns a series that shares nothing with s.
func (s *Series) Clone() *Series {
	c := *s
	c.Units, c.Sums = slices.Clone(s.Units), slices.Clone(s.Sums)
	c.Open.High, c.Open.Low = slices.Clone(s.Open.High), slices.Clone(s.Open.Low)
	return &c
}
