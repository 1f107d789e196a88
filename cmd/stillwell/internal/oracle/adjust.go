package oracle

import (
	"maps"
	"math"
	"slices"
)

// adjusted is a contrast adjusted for covariates: in each arm the scores are regressed on them,
// with slopes of the arm's own, and the arm's means are moved to the covariates' mean over all
// arms. Every unit's influence value is written out: its residual in its own arm, and the slopes
// times its distance from the overall mean, which it has from moving that mean.
func adjusted(est *Estimate, cells map[string][]*Unit, arm, baseline string) (value, se float64, parts []part) {
	nan := math.NaN()
	if len(cells[arm]) == 0 || len(cells[baseline]) == 0 {
		return nan, nan, nil
	}
	columns := est.kept(cells[arm], cells[baseline])
	p := len(columns)
	var everyone []*Unit
	for _, name := range slices.Sorted(maps.Keys(cells)) {
		everyone = append(everyone, cells[name]...)
	}
	centre := make([]float64, p)
	for k, x := range columns {
		centre[k] = mean(len(everyone), func(i int) float64 { return x(everyone[i]) })
	}
	var g, dfs [2]float64
	var residuals [2][]float64 // of the influence value, by arm and unit
	var slopes [2][]float64    // of the influence value, by arm and covariate
	for a, name := range []string{arm, baseline} {
		units := cells[name]
		g[a], residuals[a], slopes[a] = est.regress(units, columns, centre)
		dfs[a] = float64(len(units) - 1 - p)
	}
	value, by1, by0 := contrast(est.Contrast, g[0], g[1])
	by := [2]float64{by1, by0}
	total := 0.
	for a, name := range []string{arm, baseline} {
		if dfs[a] <= 0 {
			return value, nan, nil
		}
		v := by[a] * by[a] * squares(residuals[a]) / (float64(len(cells[name])) * dfs[a])
		parts = append(parts, part{v, dfs[a]})
		total += v
	}
	pooled := make([]float64, len(everyone))
	for i, u := range everyone {
		for k, x := range columns {
			pooled[i] += (by1*slopes[0][k] + by0*slopes[1][k]) * (x(u) - centre[k])
		}
	}
	v := variance(pooled)
	parts = append(parts, part{v, float64(len(everyone)) - 1})
	return value, math.Sqrt(total + v), parts
}

func mean(n int, x func(int) float64) float64 {
	sum := 0.
	for i := range n {
		sum += x(i)
	}
	return sum / float64(n)
}

// regress gives an arm's adjusted value, each unit's influence value with the scores' residuals
// in their place, and the influence value's slopes. A score that can be absent is two, its
// values with 0 for the absent, and whether it is present; its mean is their ratio.
func (est *Estimate) regress(units []*Unit, columns []func(*Unit) float64, centre []float64) (value float64, psi, slopes []float64) {
	n := len(units)
	local := make([]float64, len(columns))
	for k, x := range columns {
		local[k] = mean(n, func(i int) float64 { return x(units[i]) })
	}
	fit := func(y func(*Unit) float64) (moved float64, residual, b []float64) {
		ybar := mean(n, func(i int) float64 { return y(units[i]) })
		b = ols(n, len(columns), func(i, k int) float64 { return columns[k](units[i]) - local[k] },
			func(i int) float64 { return y(units[i]) - ybar })
		moved = ybar
		for k := range columns {
			moved += b[k] * (centre[k] - local[k])
		}
		residual = make([]float64, n)
		for i, u := range units {
			residual[i] = y(u) - ybar
			for k, x := range columns {
				residual[i] -= b[k] * (x(u) - local[k])
			}
		}
		return moved, residual, b
	}
	means := make([]float64, len(est.Of.Scores))
	type fits struct {
		level, present         float64
		rLevel, rPresent       []float64
		slopeLevel, slopeThere []float64
	}
	all := make([]fits, len(est.Of.Scores))
	for j, s := range est.Of.Scores {
		f := &all[j]
		f.level, f.rLevel, f.slopeLevel = fit(func(u *Unit) float64 { z, _ := value0(s, u); return z })
		f.present, f.rPresent, f.slopeThere = fit(func(u *Unit) float64 { _, there := value0(s, u); return there })
		means[j] = f.level / f.present
	}
	psi, slopes = make([]float64, n), make([]float64, len(columns))
	for j, slope := range est.Of.Slopes(means) {
		f := all[j]
		for i := range psi {
			psi[i] += slope * (f.rLevel[i] - means[j]*f.rPresent[i]) / f.present
		}
		for k := range slopes {
			slopes[k] += slope * (f.slopeLevel[k] - means[j]*f.slopeThere[k]) / f.present
		}
	}
	return est.Of.At(means), psi, slopes
}

func value0(s Score, u *Unit) (z, present float64) {
	if z, ok := s.Of(u.Tallies); ok {
		return z, 1
	}
	return 0, 0
}

// kept are the covariates' columns that the others do not determine in an arm, and that leave a
// degree of freedom in each. One that units lack is two: its values with 0 for the lacking, and
// who lacks it.
func (est *Estimate) kept(arms ...[]*Unit) (kept []func(*Unit) float64) {
	for _, c := range est.Adjust {
		for _, column := range []func(*Unit) float64{
			func(u *Unit) float64 { v, _ := c.of(u); return v },
			func(u *Unit) float64 {
				if _, ok := c.of(u); ok {
					return 0
				}
				return 1
			},
		} {
			free := true
			for _, units := range arms {
				free = free && len(units) >= len(kept)+3 && independent(units, kept, column)
			}
			if free {
				kept = append(kept, column)
			}
		}
	}
	return kept
}

func (c Covariate) of(u *Unit) (float64, bool) {
	if c.Tally != "" {
		v, ok := u.Tallies[c.Tally]
		return v, ok
	}
	return u.Fields.number(c.Field)
}

// independent says whether a column varies, in an arm, apart from the kept ones.
func independent(units []*Unit, kept []func(*Unit) float64, column func(*Unit) float64) bool {
	n := len(units)
	columns := append(slices.Clone(kept), column)
	centres := make([]float64, len(columns))
	for k, x := range columns {
		centres[k] = mean(n, func(i int) float64 { return x(units[i]) })
	}
	q := orthogonal(n, len(columns), func(i, k int) float64 { return columns[k](units[i]) - centres[k] })
	last := q[len(q)-1]
	size := 0.
	for i := range n {
		d := column(units[i]) - centres[len(q)-1]
		size += d * d
	}
	return size > 0 && squares(last) > 1e-10*size
}

// orthogonal makes the columns orthogonal, each to those before it (Gram-Schmidt, twice).
func orthogonal(n, p int, x func(i, k int) float64) [][]float64 {
	q := make([][]float64, p)
	for k := range q {
		q[k] = make([]float64, n)
		for i := range n {
			q[k][i] = x(i, k)
		}
		for range 2 {
			for _, earlier := range q[:k] {
				if s := squares(earlier); s > 0 {
					b := inner(earlier, q[k]) / s
					for i := range n {
						q[k][i] -= b * earlier[i]
					}
				}
			}
		}
	}
	return q
}

func inner(a, b []float64) (sum float64) {
	for i := range a {
		sum += a[i] * b[i]
	}
	return sum
}

// ols are the slopes of y on centred columns x, by back substitution on their orthogonal forms.
func ols(n, p int, x func(i, k int) float64, y func(int) float64) []float64 {
	q := orthogonal(n, p, x)
	ys := make([]float64, n)
	for i := range ys {
		ys[i] = y(i)
	}
	b := make([]float64, p)
	for k := p - 1; k >= 0; k-- {
		b[k] = inner(q[k], ys) / squares(q[k])
		for i := range ys {
			ys[i] -= b[k] * x(i, k)
		}
	}
	return b
}
