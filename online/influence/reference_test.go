package influence_test

import (
	"math"
	"testing"

	"stillwell/online/adjust"
	"stillwell/online/influence"
)

// agree compares an effect with reference values by name.
type agree struct {
	t      *testing.T
	values map[string]float64
}

func (a agree) with(name string, got float64) {
	a.t.Helper()
	want, ok := a.values[name]
	if !ok {
		a.t.Fatalf("no reference value %s", name)
	}
	near(a.t, name, got, want, 1e-9)
}

func (a agree) interval(name string, lo, hi float64, why string) {
	a.t.Helper()
	if why != "" {
		a.t.Errorf("%s: no interval: %s", name, why)
	}
	a.with(name+".low", lo)
	a.with(name+".high", hi)
}

// Values of this test: testdata/reference/reference.R, computed with R 4.2.2, survey
// 4.1-1 (svyratio, svymean), sandwich 3.0-2 (vcovHC, vcovCL) and stats (t.test).
func TestOneArmAgainstR(t *testing.T) {
	ref := agree{t, readValues(t)}
	cars := armOf(t, "", readTable(t, "mtcars.csv", "mpg", "wt"))

	e := influence.Single(meanOf(0), cars)
	ref.with("mean.value", e.Value())
	ref.with("mean.se", e.StdError())
	lo, hi, why := e.Interval(0.95)
	ref.interval("mean", lo, hi, why)

	e = influence.Single(ratioOf(0, 1), cars)
	ref.with("ratio.value", e.Value())
	ref.with("ratio.se", e.StdError())
	lo, hi, why = e.Interval(0.95)
	ref.interval("ratio", lo, hi, why)

	// A weighted mean is the ratio of the means of w y and w.
	var weighted [][]float64
	for _, r := range readTable(t, "mtcars.csv", "mpg", "cyl") {
		weighted = append(weighted, []float64{r[0] * r[1], r[1]})
	}
	e = influence.Single(ratioOf(0, 1), armOf(t, "", weighted))
	ref.with("hajek.value", e.Value())
	ref.with("hajek.se", e.StdError())
}

func TestUnitsOfManyRecordsAgainstR(t *testing.T) {
	ref := agree{t, readValues(t)}
	// Records of one earthquake are dependent: their totals are the unit's scores.
	totals := map[float64][]float64{}
	var order []float64
	for _, r := range readTable(t, "attenu.csv", "event", "accel") {
		if totals[r[0]] == nil {
			totals[r[0]] = []float64{0, 0}
			order = append(order, r[0])
		}
		totals[r[0]][0] += r[1]
		totals[r[0]][1]++
	}
	var rows [][]float64
	for _, event := range order {
		rows = append(rows, totals[event])
	}
	cell := cellOf(t, rows)
	arm := influence.NewArm("", cell, upTo(2))
	e := influence.Single(ratioOf(0, 1), &arm)
	ref.with("cluster.value", e.Value())
	ref.with("cluster.se", e.StdError())
	ref.with("cluster.cr0", e.StdError()*math.Sqrt(22./23))

	// Without event 19; computed with R 4.2.2 by direct sums.
	cell.Retract(totals[19])
	arm = influence.NewArm("", cell, upTo(2))
	e = influence.Single(ratioOf(0, 1), &arm)
	near(t, "ratio without event 19", e.Value(), 0.116798611111111, 1e-9)
	near(t, "its error, n form", e.StdError()*math.Sqrt(21./22), 0.0136740785834469, 1e-9)

	// Two records a unit, compared within it: a linear functional of both.
	sleep := readTable(t, "sleep.csv", "extra", "group")
	first, second := where(sleep, 1), where(sleep, 2)
	rows = nil
	for i := range first {
		rows = append(rows, []float64{first[i][0], second[i][0]})
	}
	within := smooth{
		func(m []float64) float64 { return m[1] - m[0] },
		func(m, dst []float64) { dst[0], dst[1] = -1, 1 },
	}
	e = influence.Single(influence.Estimate{Of: within, Shape: influence.Shape{Kind: influence.Linear}}, armOf(t, "", rows))
	ref.with("paired.value", e.Value())
	ref.with("paired.se", e.StdError())
}

func TestTwoArmsAgainstR(t *testing.T) {
	ref := agree{t, readValues(t)}
	trial := readTable(t, "anorexia.csv", "Postwt", "Treat")
	ft, cont := armOf(t, "FT", where(trial, 1)), armOf(t, "Cont", where(trial, 0))

	e := influence.Difference(meanOf(0), ft, cont)
	ref.with("difference.value", e.Value())
	ref.with("difference.se", e.StdError())
	ref.with("difference.hc2", e.StdError())
	ref.with("difference.df", e.Freedom())
	ref.with("difference.t", e.Z(0))
	lo, hi, why := e.Interval(0.95)
	ref.interval("difference", lo, hi, why)

	e = influence.Relative(meanOf(0), ft, cont)
	ref.with("lift.value", e.Value())
	ref.with("lift.se", e.StdError())
	z := 1.959963984540054 // qnorm(.975)
	lo, hi, why = e.Set(z)
	ref.interval("lift", lo, hi, why)

	cars := readTable(t, "mtcars.csv", "mpg", "wt", "am")
	manual, automatic := armOf(t, "manual", where(cars, 1)), armOf(t, "automatic", where(cars, 0))
	e = influence.Difference(ratioOf(0, 1), manual, automatic)
	ref.with("ratios.value", e.Value())
	ref.with("ratios.se", e.StdError())
	e = influence.Relative(ratioOf(0, 1), manual, automatic)
	ref.with("ratios.lift.value", e.Value())
	ref.with("ratios.lift.se", e.StdError())
	lo, hi, why = e.Set(2)
	ref.interval("ratios.lift", lo, hi, why)
}

// adjusted are arms adjusted for what stands after the scores in their rows. The first
// two are compared.
func adjusted(t *testing.T, scores int, arms ...[][]float64) []influence.Arm {
	t.Helper()
	var moments []adjust.Arm
	for i, rows := range arms {
		all := upTo(len(rows[0]))
		moments = append(moments, adjust.FromCell(string(rune('A'+i)), cellOf(t, rows), all[:scores], all[scores:]))
	}
	keep, dropped := adjust.Choose(moments[:2], scores)
	if len(dropped) > 0 {
		t.Fatalf("dropped %v", dropped)
	}
	return adjust.Means(moments, scores, keep)
}

func TestAdjustedAgainstR(t *testing.T) {
	ref := agree{t, readValues(t)}
	trial := readTable(t, "anorexia.csv", "Postwt", "Prewt", "Treat")
	arms := adjusted(t, 1, where(trial, 1), where(trial, 0))
	ref.with("lin.b1", arms[0].Slopes[0])
	ref.with("lin.b0", arms[1].Slopes[0])
	ref.with("lin.m1", arms[0].Mean[0])
	ref.with("lin.m0", arms[1].Mean[0])
	e := influence.Difference(meanOf(0), &arms[0], &arms[1])
	ref.with("lin.value", e.Value())
	ref.with("lin.se", e.StdError())
	ref.with("lin.psi.se", e.StdError())
	ref.with("lin.df", e.Freedom())

	e = influence.Relative(meanOf(0), &arms[0], &arms[1])
	ref.with("lin.lift.value", e.Value())
	ref.with("lin.lift.se", e.StdError())
	lo, hi, why := e.Set(2)
	ref.interval("lin.lift", lo, hi, why)

	cars := readTable(t, "mtcars.csv", "mpg", "wt", "hp", "am")
	arms = adjusted(t, 1, where(cars, 1), where(cars, 0))
	e = influence.Difference(meanOf(0), &arms[0], &arms[1])
	ref.with("lin2.value", e.Value())
	ref.with("lin2.se", e.StdError())
	ref.with("lin2.df", e.Freedom())

	arms = adjusted(t, 2, where(cars, 1), where(cars, 0))
	e = influence.Difference(ratioOf(0, 1), &arms[0], &arms[1])
	near(t, "difference of adjusted ratios", e.Value(), ref.values["lin.ratio.r1"]-ref.values["lin.ratio.r0"], 1e-9)
	ref.with("lin.ratio.se", e.StdError())
	e = influence.Relative(ratioOf(0, 1), &arms[0], &arms[1])
	logLift := math.Log(ref.values["lin.ratio.r1"] / ref.values["lin.ratio.r0"])
	for _, theta := range []float64{-0.2, 0, 0.5} {
		near(t, "test of an adjusted lift of ratios", e.Z(theta), (logLift-math.Log1p(theta))/ref.values["lin.ratio.log.se"], 1e-9)
	}
}

// The n form of the same variances. Published beside them: moments, values and errors
// computed with R 4.2.2, lm by arm and explicit sums over units.
func TestVarianceFormsOfAnAdjustedDifference(t *testing.T) {
	trial := readTable(t, "anorexia.csv", "Postwt", "Prewt", "Treat")
	arms := adjusted(t, 1, where(trial, 1), where(trial, 0))
	pool := arms[0].Pool
	near(t, "covariate mean", pool.Mean[0], 82.2186046511628, 1e-12)
	near(t, "covariate spread", pool.Co[0], 1245.66511627907, 1e-12)
	rss := func(a influence.Arm) float64 { return a.Cov[0] * float64(a.Units) * a.Freedom }
	near(t, "RSS 1", rss(arms[0]), 816.340828795059, 1e-12)
	near(t, "RSS 0", rss(arms[1]), 548.037256227313, 1e-12)
	n1, n0, n := 17., 26., 43.
	b1, b0 := arms[0].Slopes[0], arms[1].Slopes[0]
	near(t, "V11", rss(arms[0])/(n1*n1)+b1*b1*pool.Co[0]/(n*n), 3.38164861789457, 1e-12)
	near(t, "V00", rss(arms[1])/(n0*n0)+b0*b0*pool.Co[0]/(n*n), 0.822836232690193, 1e-12)
	near(t, "V10", b1*b0*pool.Co[0]/(n*n), -0.0821937345716679, 1e-12)

	// The same numbers through effects, which take an arm's freedom and the pool's
	// size as they are told.
	for i := range arms {
		arms[i].Cov[0] *= arms[i].Freedom / float64(arms[i].Units)
	}
	for i := range pool.Co {
		pool.Co[i] *= (n - 1) / n
	}
	ref := agree{t, readValues(t)}
	ref.with("lin.n.form", influence.Difference(meanOf(0), &arms[0], &arms[1]).StdError())
	ref.with("lin.lift.n.form", influence.Relative(meanOf(0), &arms[0], &arms[1]).StdError())
	logLift := smooth{
		func(m []float64) float64 { return math.Log(m[0]) },
		func(m, dst []float64) { dst[0] = 1 / m[0] },
	}
	e := influence.Difference(influence.Estimate{Of: logLift, Shape: influence.Shape{Kind: influence.Smooth}}, &arms[0], &arms[1])
	near(t, "log lift, n form", e.StdError(), 0.0238634382762622, 1e-9)
}

// Functionals of second-order scores: errors in n form computed with R 4.2.2 by direct
// sums of influence values over the cars.
func TestSmoothFunctionals(t *testing.T) {
	var rows [][]float64
	for _, r := range readTable(t, "mtcars.csv", "mpg", "wt") {
		x, y := r[0], r[1]
		rows = append(rows, []float64{x, y, x * x, y * y, x * y})
	}
	arm := armOf(t, "", rows)
	variance := smooth{
		func(m []float64) float64 { return m[2] - m[0]*m[0] },
		func(m, dst []float64) { clear(dst); dst[0], dst[2] = -2*m[0], 1 },
	}
	sd := smooth{
		func(m []float64) float64 { return math.Sqrt(variance.eval(m)) },
		func(m, dst []float64) {
			variance.grad(m, dst)
			for i := range dst {
				dst[i] /= 2 * math.Sqrt(variance.eval(m))
			}
		},
	}
	covariance := smooth{
		func(m []float64) float64 { return m[4] - m[0]*m[1] },
		func(m, dst []float64) { clear(dst); dst[0], dst[1], dst[4] = -m[1], -m[0], 1 },
	}
	correlation := smooth{
		func(m []float64) float64 {
			return covariance.eval(m) / math.Sqrt((m[2]-m[0]*m[0])*(m[3]-m[1]*m[1]))
		},
		func(m, dst []float64) {
			vx, vy := m[2]-m[0]*m[0], m[3]-m[1]*m[1]
			c, s := covariance.eval(m), math.Sqrt(vx*vy)
			dst[0] = -m[1]/s + c*m[0]/(vx*s)
			dst[1] = -m[0]/s + c*m[1]/(vy*s)
			dst[2] = -c / (2 * vx * s)
			dst[3] = -c / (2 * vy * s)
			dst[4] = 1 / s
		},
	}
	for _, tt := range []struct {
		what          string
		of            smooth
		value, nForms float64
	}{
		{"variance", variance, 35.188974609375, 8.34456190234589},
		{"standard deviation", sd, 5.93202955230122, 0.703347971278125},
		{"covariance", covariance, -4.95678828125, 1.20059802320607},
		{"correlation", correlation, -0.867659376517228, 0.0320780112741731},
	} {
		e := influence.Single(influence.Estimate{Of: tt.of, Shape: influence.Shape{Kind: influence.Smooth}}, arm)
		near(t, tt.what, e.Value(), tt.value, 1e-9)
		near(t, "error of the "+tt.what, e.StdError()*math.Sqrt(31./32), tt.nForms, 1e-9)
	}
}

func TestInfluenceValuesAgainstR(t *testing.T) {
	ref := agree{t, readValues(t)}
	rows := readTable(t, "mtcars.csv", "mpg", "wt")
	cell := cellOf(t, rows)
	arm := influence.NewArm("", cell, upTo(2))
	e := influence.Single(ratioOf(0, 1), &arm)
	c := e.Curve(influence.One)
	ref.with("ratio.skewness", c.Skewness(cell, upTo(2)))
	ref.with("ratio.heaviest", largestSquare(c, rows)/c.SumOfSquares(cell, upTo(2)))

	trial := readTable(t, "anorexia.csv", "Postwt", "Prewt", "Treat")
	ft, cont := where(trial, 1), where(trial, 0)
	arms := adjusted(t, 1, ft, cont)
	e = influence.Difference(meanOf(0), &arms[0], &arms[1])
	one, zero := e.Curve(influence.One), e.Curve(influence.Zero)
	ref.with("lin.skewness.ft", one.Skewness(cellOf(t, ft), upTo(2)))
	ref.with("lin.heaviest", max(largestSquare(one, ft), largestSquare(zero, cont))/(e.StdError()*e.StdError()))
}

func largestSquare(c influence.Curve, rows [][]float64) (top float64) {
	for _, z := range rows {
		top = max(top, c.At(z)*c.At(z))
	}
	return top
}
