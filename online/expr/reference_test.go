package expr

import (
	"math"
	"testing"
)

// Fuel use and weight of 32 cars and their cylinders: the set mtcars that ships
// with R (Henderson, Velleman 1981, Biometrics 37:391).
var (
	mpg = []float64{21, 21, 22.8, 21.4, 18.7, 18.1, 14.3, 24.4, 22.8, 19.2, 17.8, 16.4, 17.3, 15.2, 10.4, 10.4, 14.7, 32.4, 30.4, 33.9,
		21.5, 15.5, 15.2, 13.3, 19.2, 27.3, 26, 30.4, 15.8, 19.7, 15, 21.4}
	wt = []float64{2.62, 2.875, 2.32, 3.215, 3.44, 3.46, 3.57, 3.19, 3.15, 3.44, 3.44, 4.07, 3.73, 3.78, 5.25, 5.424, 5.345, 2.2, 1.615, 1.835,
		2.465, 3.52, 3.435, 3.84, 3.845, 1.935, 2.14, 1.513, 3.17, 2.77, 3.57, 2.78}
	cyl = []float64{6, 6, 4, 6, 8, 6, 8, 4, 4, 6, 6, 8, 8, 8, 8, 8, 8, 4, 4, 4, 4, 8, 8, 8, 8, 4, 4, 4, 8, 6, 8, 4}
)

// TestStandardErrors takes the standard error of an estimate from its scores and
// gradient, sqrt(sum psi^2 / (n (n-1))) or / n^2, and compares it with R.
func TestStandardErrors(t *testing.T) {
	tallies := []Tally{{Name: "mpg"}, {Name: "wt"}, {Name: "cyl"}}
	for _, tt := range []struct {
		src            string
		value, se, seN float64 // se divides by n - 1; 0: not computed
		source         string
	}{
		{"mean(mpg)", 20.090625, 1.06542395937281, 1.0486445806578, "R 4.2.2, sd(mpg)/sqrt(32)"},
		{"mean(mpg) / mean(wt)", 6.24465770456135, 0.64444962023942, 0.63430017302114, "R 4.2.2, survey 4.1-1, svyratio"},
		{"mean(cyl * mpg) / mean(cyl)", 18.6545454545455, 0.918953177285143, 0.904480569223923, "R 4.2.2, survey 4.1-1, svymean with weights cyl"},
		{"mean(mpg ** 2) - mean(mpg) ** 2", 35.188974609375, 0, 8.34456190234589, "R 4.2.2, (m4 - s^4)/n"},
		{"sqrt(mean(mpg ** 2) - mean(mpg) ** 2)", 5.93202955230122, 0, 0.703347971278125, "R 4.2.2, (m4 - s^4)/(4 s^2 n)"},
		{"mean(mpg * wt) - mean(mpg) * mean(wt)", -4.95678828125, 0, 1.20059802320607, "R 4.2.2, (m22 - c^2)/n"},
		{"(mean(mpg * wt) - mean(mpg) * mean(wt)) / sqrt((mean(mpg ** 2) - mean(mpg) ** 2) * (mean(wt * wt) - mean(wt) ** 2))",
			-0.867659376517228, 0, 0.0320780112741731, "R 4.2.2, influence function of the correlation"},
	} {
		e, err := ParseEstimate(tt.src, tallies)
		if err != nil {
			t.Fatal(err)
		}
		value, se, seN := describe(e, mpg, wt, cyl)
		near := func(got, want float64) bool { return want == 0 || math.Abs(got-want) <= 1e-11*math.Abs(want) }
		if !near(value, tt.value) || !near(se, tt.se) || !near(seN, tt.seN) {
			t.Errorf("%s = %.15g, se %.15g and %.15g; want %.15g, %.15g and %.15g (%s)",
				tt.src, value, se, seN, tt.value, tt.se, tt.seN, tt.source)
		}
	}
}

// describe returns an estimate over columns of tallies and its standard errors.
func describe(e *Estimate, columns ...[]float64) (value, se, seN float64) {
	n, k := len(columns[0]), len(e.Scores())
	scores, m := make([][]float64, n), make([]float64, k)
	row := make([]float64, len(columns))
	for i := range scores {
		for j, c := range columns {
			row[j] = c[i]
		}
		scores[i] = make([]float64, k)
		for j, s := range e.Scores() {
			scores[i][j], _ = s.Eval(row)
			m[j] += scores[i][j] / float64(n)
		}
	}
	grad, ss := make([]float64, k), 0.0
	value = e.Gradient(m, grad)
	for _, z := range scores {
		psi := 0.0
		for j := range z {
			psi += grad[j] * (z[j] - m[j])
		}
		ss += psi * psi
	}
	return value, math.Sqrt(ss / float64(n*(n-1))), math.Sqrt(ss) / float64(n)
}

// TestRelativeLift compares with the delta method for two arms, family therapy
// (17) against control (26): data anorexia of R's MASS 7.3-58.2, means of Postwt
// and their Welch variances s^2/n; lift and standard errors computed with R 4.2.2.
func TestRelativeLift(t *testing.T) {
	mean := []float64{90.4941176470588, 81.1076923076923}
	v := []float64{1149.22941176471 / (17 * 16), 562.698461538462 / (26 * 25)}
	for src, want := range map[string][2]float64{
		"mean(fare) / mean(visits) - 1":  {0.115727930018745, 0.0283915426924457},
		"log(mean(fare) / mean(visits))": {0.109507043931648, 0.0254466540888411},
	} {
		g := make([]float64, 2)
		value := parseEstimate(t, src).Gradient(mean, g)
		se := math.Sqrt(g[0]*g[0]*v[0] + g[1]*g[1]*v[1])
		if math.Abs(value-want[0]) > 1e-12 || math.Abs(se-want[1]) > 1e-12 {
			t.Errorf("%s = %.15g, se %.15g; want %.15g, %.15g", src, value, se, want[0], want[1])
		}
	}
}
