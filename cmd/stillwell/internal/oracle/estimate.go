package oracle

import (
	"math"

	"gonum.org/v1/gonum/stat/distuv"
)

// single is an estimate over one arm.
func single(est *Estimate, cells map[string][]*Unit, arm string) Number {
	units := cells[arm]
	value, psi := est.curve(units)
	return Number{value, math.Sqrt(variance(psi)), counted(map[string][]*Unit{arm: units})}
}

func counted(cells map[string][]*Unit) map[string]int {
	m := map[string]int{}
	for arm, units := range cells {
		if arm == "" {
			arm = "all"
		}
		m[arm] = len(units)
	}
	return m
}

// curve is the estimate's value over units of one arm, and each unit's influence value.
func (est *Estimate) curve(units []*Unit) (value float64, psi []float64) {
	n := float64(len(units))
	means := make([]float64, len(est.Of.Scores))
	deviations := make([][]float64, len(est.Of.Scores)) // by score and unit
	for j, score := range est.Of.Scores {
		sum, present := 0., 0.
		for _, u := range units {
			if z, ok := score.Of(u.Tallies); ok {
				sum += z
				present++
			}
		}
		means[j] = sum / present // NaN if there are none
		deviations[j] = make([]float64, len(units))
		for i, u := range units {
			if z, ok := score.Of(u.Tallies); ok {
				deviations[j][i] = (z - means[j]) / (present / n)
			}
		}
	}
	slopes := est.Of.Slopes(means)
	psi = make([]float64, len(units))
	for i := range units {
		for j, slope := range slopes {
			psi[i] += slope * deviations[j][i]
		}
	}
	return est.Of.At(means), psi
}

// variance of a mean of influence values, NaN for fewer than two.
func variance(psi []float64) float64 {
	n := float64(len(psi))
	if n < 2 {
		return math.NaN()
	}
	return squares(psi) / (n * (n - 1))
}

func squares(xs []float64) (sum float64) {
	for _, x := range xs {
		sum += x * x
	}
	return sum
}

// details are what an interval needs beyond value and error.
type details struct {
	parts    []part // whose variances add up
	fewest   int    // units in the smaller arm
	binary   bool   // all scores are 0 or 1
	heaviest float64
}

type part struct{ variance, df float64 }

// compare is an estimate's contrast of an arm with the baseline.
func compare(est *Estimate, cells map[string][]*Unit, arm, baseline string) (Number, details) {
	one, zero := cells[arm], cells[baseline]
	num := Number{Units: counted(map[string][]*Unit{arm: one, baseline: zero})}
	d := details{fewest: min(len(one), len(zero)), binary: est.binary(one) && est.binary(zero), heaviest: math.NaN()}
	if len(est.Adjust) > 0 {
		num.Value, num.StdError, d.parts = adjusted(est, cells, arm, baseline)
		return num, d
	}
	g1, psi1 := est.curve(one)
	g0, psi0 := est.curve(zero)
	by1, by0 := 0., 0.
	num.Value, by1, by0 = contrast(est.Contrast, g1, g0)
	v1, v0 := by1*by1*variance(psi1), by0*by0*variance(psi0)
	num.StdError = math.Sqrt(v1 + v0)
	d.parts = []part{{v1, float64(len(one)) - 1}, {v0, float64(len(zero)) - 1}}
	d.heaviest = math.Max(by1*by1*heaviest(psi1), by0*by0*heaviest(psi0)) / (v1 + v0)
	return num, d
}

// contrast of two values, and its derivatives by each.
func contrast(how string, g1, g0 float64) (value, by1, by0 float64) {
	if how == "relative" {
		return g1/g0 - 1, 1 / g0, -g1 / (g0 * g0)
	}
	return g1 - g0, 1, -1
}

// heaviest is what the heaviest unit adds to the variance.
func heaviest(psi []float64) float64 {
	n, most := float64(len(psi)), math.NaN()
	for _, x := range psi {
		if c := x * x / (n * (n - 1)); !(c <= most) {
			most = c
		}
	}
	return most
}

// interval is value +- t se with Welch's degrees of freedom, where that is the rule.
func (d details) interval(level float64, num Number) *[2]float64 {
	total, below := 0., 0.
	for _, p := range d.parts {
		total += p.variance
		below += p.variance * p.variance / p.df
	}
	if d.fewest < 5 || d.binary || !(total > 0) {
		return nil
	}
	t := distuv.StudentsT{Sigma: 1, Nu: total * total / below}.Quantile((1 + level) / 2)
	return &[2]float64{num.Value - t*num.StdError, num.Value + t*num.StdError}
}

func singleInterval(level float64, est *Estimate, cells map[string][]*Unit, arm string) (*[2]float64, float64) {
	units := cells[arm]
	value, psi := est.curve(units)
	v := variance(psi)
	share := heaviest(psi) / v
	if !est.Of.Plain || est.absent(units) {
		return nil, share
	}
	d := details{parts: []part{{v, float64(len(units)) - 1}}, fewest: len(units), binary: est.binary(units)}
	return d.interval(level, Number{Value: value, StdError: math.Sqrt(v)}), share
}

// binary says whether no score of the units is other than 0 or 1.
func (est *Estimate) binary(units []*Unit) bool {
	for _, u := range units {
		for _, s := range est.Of.Scores {
			if z, ok := s.Of(u.Tallies); ok && z != 0 && z != 1 {
				return false
			}
		}
	}
	return true
}

// absent says whether a unit lacks a score.
func (est *Estimate) absent(units []*Unit) bool {
	for _, u := range units {
		for _, s := range est.Of.Scores {
			if _, ok := s.Of(u.Tallies); !ok {
				return true
			}
		}
	}
	return false
}
