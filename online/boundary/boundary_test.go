package boundary

import (
	"fmt"
	"math"
	"testing"

	"pgregory.net/rapid"
	"stillwell/online/boundary/normal"
)

// check reports where got is not want to rel.
func check(t *testing.T, what string, got, want, rel float64) {
	t.Helper()
	if !(math.Abs(got-want) <= rel*math.Abs(want)) {
		t.Errorf("%s = %.15g, want %.15g", what, got, want)
	}
}

// The tuning equation is Howard et al. 2021, Ann. Stat. 49:1055, eq. 3.14, solved
// with scipy 1.10.1 lambertw; the closed forms bracket it there.
func TestMixtureTuning(t *testing.T) {
	for _, tt := range []struct{ alpha, s, low, high, critical float64 }{
		{0.10, 6.63835206799381, 6.32885960529624, 7.13234981179599, 2.76375687570268},
		{0.05, 8.21196806206825, 7.93615460173756, 8.78180042803288, 3.03512241302855},
		{0.01, 11.7563712224954, 11.5337413407152, 12.430667178344, 3.57160625244377},
		{0.001, 16.6884207908599, 16.5111852006278, 17.4413024724403, 4.20576042956086},
	} {
		s := NormalMixture{}.Tuning(tt.alpha)
		check(t, fmt.Sprintf("S(%g)", tt.alpha), s, tt.s, 1e-12)
		if s < tt.low || s > tt.high {
			t.Errorf("S(%g) = %g lies outside its closed approximations %g and %g", tt.alpha, s, tt.low, tt.high)
		}
		check(t, "threshold at the tuned time", NormalMixture{}.Critical(tt.alpha, s), tt.critical, 1e-12)
		check(t, "its closed form", math.Sqrt(1+s), tt.critical, 1e-12)
	}
	// Howard et al. 2021, p. 1067: about 3.0 where tuned, about 3.6 a hundred times later; 4 digits computed with scipy 1.10.1.
	s := NormalMixture{}.Tuning(0.05)
	check(t, "threshold at 100 n*", NormalMixture{}.Critical(0.05, 100*s), 3.566359, 1e-6)
}

// Radius in standard deviations at alpha .05, tuned for 1000 units, and the same
// with the variance known as a sum (Waudby-Smith et al. 2024, thm. 2.2 and eq. 18),
// computed with numpy 1.24.2.
func TestMixtureRadius(t *testing.T) {
	rho2 := NormalMixture{}.Tuning(0.05) / 1000
	for _, tt := range []struct{ t, radius float64 }{
		{10, 2.82827860139768},
		{100, 0.38232183330378},
		{500, 0.137681974301061},
		{1000, 0.0959789980259653},
		{2000, 0.0685131924862246},
		{5000, 0.0446487238735021},
		{10000, 0.0324631075461313},
		{100000, 0.0112778161735641},
	} {
		check(t, fmt.Sprintf("radius at %g", tt.t), NormalMixture{}.Critical(0.05, tt.t*rho2)/math.Sqrt(tt.t), tt.radius, 1e-12)
	}
	check(t, "radius with rho 1", NormalMixture{}.Critical(0.05, 100)/10, 0.327301862423493, 1e-12)
	check(t, "radius with variance sum 2500", NormalMixture{}.Critical(0.05, 25)*math.Sqrt(2500)/100, 1.55076944841381, 1e-12)
}

// E-values computed with numpy 1.24.2. The anorexia row is the treatment effect of
// Hand et al. 1993 as in R's MASS 7.3-58.2, adjusted as in Lin 2013, 43 units.
func TestMixtureE(t *testing.T) {
	s := NormalMixture{}.Tuning(0.05)
	check(t, "E(3, S)", math.Exp(NormalMixture{}.LogE(3, s)), 18.1969369280748, 1e-12)
	check(t, "E at the threshold", math.Exp(NormalMixture{}.LogE(math.Sqrt(1+s), s)), 20, 1e-12)
	const est, se = 8.55605718905981, 2.09018475731887
	for _, tt := range []struct{ tuned, e, radius float64 }{
		{1000, 7.65372911970635, 10.264862253116},
		{43, 577.32812995189, 6.34396660430914},
	} {
		u := s * 43 / tt.tuned
		check(t, "E", math.Exp(NormalMixture{}.LogE(est/se, u)), tt.e, 1e-12)
		check(t, "radius", se*NormalMixture{}.Critical(0.05, u), tt.radius, 1e-12)
	}
}

// The half-normal mixture: radii computed with scipy 1.10.1; thresholds and tuning with
// R 4.2.2, testdata/reference.R. The closed forms are valid and wider.
func TestHalfMixture(t *testing.T) {
	m := NormalMixture{OneSided: true}
	rho2 := NormalMixture{}.Tuning(0.05) / 1000
	for _, tt := range []struct{ t, radius, half, one, twoSided float64 }{
		{100, 0.340472618888146, 0.342110059868927, 0.344378114173073, 0.339743506984137},
		{1000, 0.087560902940771, 0.0877127038328941, 0.0879180735568559, 0.08750348450337},
		{10000, 0.030229208587431, 0.0302430645276046, 0.0302612641025375, 0.0302247543651314},
	} {
		u := tt.t * rho2
		radius := m.Critical(0.05, u) / math.Sqrt(tt.t)
		check(t, fmt.Sprintf("radius at %g", tt.t), radius, tt.radius, 1e-11)
		form := func(c float64) float64 {
			return math.Sqrt(2*(1+1/u)*math.Log(c+math.Sqrt(1+u)/0.1)) / math.Sqrt(tt.t)
		}
		check(t, "closed form, 1/2", form(0.5), tt.half, 1e-12)
		check(t, "closed form, 1", form(1), tt.one, 1e-12)
		check(t, "two-sided at twice the error", NormalMixture{}.Critical(0.1, u)/math.Sqrt(tt.t), tt.twoSided, 1e-12)
		if !(tt.twoSided < radius && radius < form(0.5)) {
			t.Errorf("at %g: the exact radius %g does not lie between the invalid %g and the closed %g", tt.t, radius, tt.twoSided, form(0.5))
		}
	}
	for _, tt := range []struct{ alpha, u, critical float64 }{
		{0.05, 0.1, 7.21343947966001},
		{0.05, 1, 3.26175326543269},
		{0.05, 8, 2.76819559101736},
		{0.05, 100, 3.05203363479651},
		{0.05, 10000, 3.71714860834146},
		{0.01, 0.1, 9.33630752218049},
		{0.01, 1, 4.12812489073607},
		{0.01, 8, 3.35792636582047},
		{0.01, 100, 3.54457088652788},
		{0.01, 10000, 4.12749640058099},
		{1e-06, 0.1, 17.0217628179326},
		{1e-06, 1, 7.34001010155569},
		{1e-06, 8, 5.65660634632481},
		{1e-06, 100, 5.5828707465227},
		{1e-06, 10000, 5.95472187772926},
	} {
		check(t, fmt.Sprintf("threshold(%g, %g)", tt.alpha, tt.u), m.Critical(tt.alpha, tt.u), tt.critical, 1e-12)
	}
	for _, tt := range []struct{ alpha, s, critical float64 }{
		{0.1, 5.1290759200609, 2.45814444574728},
		{0.05, 6.69242470200985, 2.76582212267687},
		{0.01, 10.2537296348937, 3.3534121818539},
		{0.001, 15.2160884404619, 4.02681825002444},
	} {
		s := m.Tuning(tt.alpha)
		check(t, fmt.Sprintf("one-sided S(%g)", tt.alpha), s, tt.s, 1e-6) // a minimum is flat: half the digits
		check(t, "its threshold", m.Critical(tt.alpha, s), tt.critical, 1e-12)
	}
}

// Two-sided: constants and radii at alpha .05 from m = 1000, computed with scipy 1.10.1
// from the formula of Robbins and Siegmund 1970.
func TestDelayedStart(t *testing.T) {
	var d DelayedStart
	for _, tt := range []struct{ alpha, a float64 }{
		{0.10, 2.50027771080941},
		{0.05, 2.79548348291511},
		{0.01, 3.36821417521873},
		{0.001, 4.03314222365616},
	} {
		check(t, fmt.Sprintf("A(%g)", tt.alpha), d.Constant(tt.alpha), tt.a, 1e-12)
	}
	for _, tt := range []struct{ t, radius float64 }{
		{1000, 0.0884009496739214},
		{2000, 0.0652222166282745},
		{10000, 0.0318077238988351},
		{100000, 0.0111444596500859},
	} {
		check(t, fmt.Sprintf("radius at %g", tt.t), d.Critical(0.05, tt.t/1000)/math.Sqrt(tt.t), tt.radius, 1e-12)
	}
	check(t, "p", d.P(3.5, 2), 0.00906614361323568, 1e-11)
}

// One-sided: R 4.2.2, testdata/reference.R.
func TestDelayedStartOneSided(t *testing.T) {
	d := DelayedStart{OneSided: true}
	for _, tt := range []struct{ alpha, a float64 }{
		{0.5, 0.925749576012972},
		{0.1, 2.162754566576},
		{0.05, 2.503064585},
		{0.01, 3.136760661},
		{0.001, 3.84651064309752},
	} {
		check(t, fmt.Sprintf("A(%g)", tt.alpha), d.Constant(tt.alpha), tt.a, 1e-9)
	}
	for _, tt := range []struct{ alpha, ratio, critical float64 }{
		{0.05, 1, 2.50306458451551},
		{0.05, 2, 2.63714002072274},
		{0.05, 10, 2.92557826263984},
		{0.05, 1000, 3.62781243789601},
		{0.01, 1, 3.13676066229793},
		{0.01, 2, 3.24528570709977},
		{0.01, 10, 3.48434168395472},
		{0.01, 1000, 4.09210905202347},
	} {
		check(t, fmt.Sprintf("threshold(%g, %g)", tt.alpha, tt.ratio), d.Critical(tt.alpha, tt.ratio), tt.critical, 1e-9)
	}
	for _, tt := range []struct{ z, ratio, p float64 }{
		{-1, 1, 0.968412109311776},
		{-1, 5, 0.999943218771488},
		{-1, 100, 1},
		{0, 1, 0.818309886183791},
		{0, 5, 0.98441610081431},
		{0, 100, 1},
		{1, 1, 0.470216751790438},
		{1, 5, 0.746209332183089},
		{1, 100, 0.999545087481847},
		{3, 1, 0.0146651110973554},
		{3, 5, 0.0302653431422368},
		{3, 100, 0.111345252082873},
		{4.5, 1, 7.53247635866612e-05},
		{4.5, 5, 0.00016220151325925},
		{4.5, 100, 0.000670427785674157},
	} {
		check(t, fmt.Sprintf("p(%g, %g)", tt.z, tt.ratio), d.P(tt.z, tt.ratio), tt.p, 1e-8)
	}
	// The two-sided boundary at twice the error, looked at on one side, errs more than alpha: R, same script.
	for _, tt := range []struct{ alpha, realised float64 }{{0.05, 0.0503087305806759}, {0.01, 0.0100085086180396}} {
		got := d.P(DelayedStart{}.Constant(2*tt.alpha), 1)
		check(t, "error of the two-sided constant", got, tt.realised, 1e-9)
		if got <= tt.alpha {
			t.Errorf("two-sided at %g errs %g on one side: it may be used", 2*tt.alpha, got)
		}
	}
}

// A threshold and the p-value (or the e-value) say the same at any argument, in the far tails too.
func TestThresholdsInvert(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		alpha := math.Exp(-rapid.Float64Range(0.01, 650).Draw(t, "-log alpha"))
		ratio := math.Exp(rapid.Float64Range(0, 40).Draw(t, "log ratio"))
		oneSided := rapid.Bool().Draw(t, "one-sided")
		d := DelayedStart{OneSided: oneSided}
		if p := d.P(d.Critical(alpha, ratio), ratio); math.Abs(math.Log(p)-math.Log(alpha)) > 1e-9*(1-math.Log(alpha)) {
			t.Fatalf("delayed start: p at the threshold of %g = %g", alpha, p)
		}
		m := NormalMixture{OneSided: oneSided}
		u := ratio * math.Exp(-rapid.Float64Range(0, 40).Draw(t, "-log u"))
		c := m.Critical(alpha, u)
		if e := m.LogE(c, u); math.Abs(e+math.Log(alpha)) > 1e-9*(1-math.Log(alpha)) {
			t.Fatalf("mixture: log E at the threshold of %g = %g", alpha, e)
		}
		z := rapid.Float64Range(-50, 50).Draw(t, "z")
		if m.P(z, u) > m.P(z-1, u) && oneSided || d.P(z, ratio) > d.P(z-1, ratio) && oneSided {
			t.Fatalf("one-sided p-values rise with z at %g", z)
		}
		s := m.Tuning(alpha)
		if m.Critical(alpha, s) > math.Min(m.Critical(alpha, 0.9*s), m.Critical(alpha, 1.1*s)) {
			t.Fatalf("mixture: threshold at %g is not the smallest", s)
		}
	})
}

func TestDomains(t *testing.T) {
	nan := math.NaN()
	for _, oneSided := range []bool{false, true} {
		m, d := NormalMixture{oneSided}, DelayedStart{oneSided}
		for name, got := range map[string]float64{
			"mixture tuning, error 0":       m.Tuning(0),
			"mixture tuning, error NaN":     m.Tuning(nan),
			"mixture threshold, error 1":    m.Critical(1, 1),
			"mixture threshold, u 0":        m.Critical(0.05, 0),
			"mixture e, u negative":         m.LogE(1, -1),
			"mixture e, z NaN":              m.LogE(nan, 1),
			"mixture p, z NaN":              m.P(nan, 1),
			"delayed constant, error 2":     d.Constant(2),
			"delayed threshold, ratio .5":   d.Critical(0.05, 0.5),
			"delayed threshold, error 0":    d.Critical(0, 2),
			"delayed p, ratio NaN":          d.P(1, nan),
			"delayed p, z NaN":              d.P(nan, 2),
			"share of no comparison":        EqualShare(0.05, 0),
			"share of the zeroth segment":   SegmentShare(0.05, 0),
			"quantile of a certain outcome": normal.UpperQuantile(0),
		} {
			if !math.IsNaN(got) {
				t.Errorf("one-sided %t: %s = %g, want NaN", oneSided, name, got)
			}
		}
		// Beyond all numbers, still no NaN.
		for _, z := range []float64{-1e200, -1e10, 1e10, 1e200, math.MaxFloat64} {
			if p := d.P(z, 1e300); !(p == 0 || p == 1) {
				t.Errorf("one-sided %t: delayed p of z = %g is %g", oneSided, z, p)
			}
			if p := m.P(z, 1e300); !(p >= 0 && p <= 1) {
				t.Errorf("one-sided %t: mixture p of z = %g is %g", oneSided, z, p)
			}
		}
	}
}

// The ends of the searches: errors near 0 and 1, weights from Weight(-40) on.
func TestSearchEnds(t *testing.T) {
	for _, alpha := range []float64{1 - 1e-15, 0.9999, 0.5000001, 0.5, 0.4999999, 1e-300} {
		for _, oneSided := range []bool{false, true} {
			d := DelayedStart{oneSided}
			a := d.Constant(alpha)
			if p := d.P(a, 1); !(math.Abs(p-alpha) <= 1e-12*alpha) {
				t.Errorf("one-sided %t: A(%g) = %g, whose p is %g", oneSided, alpha, a, p)
			}
			for _, ratio := range []float64{1, 1 + 1e-15, 2, 1e300} {
				if c := d.Critical(alpha, ratio); !(c >= a-1e-12) {
					t.Errorf("one-sided %t: threshold(%g, %g) = %g", oneSided, alpha, ratio, c)
				}
			}
			m := NormalMixture{oneSided}
			if s := m.Tuning(alpha); !(s > 0) || !(m.Critical(alpha, s) > 0) {
				t.Errorf("one-sided %t: S(%g) = %g", oneSided, alpha, s)
			}
		}
	}
	for x := -42.0; x <= 42; x += 0.01 {
		if got := invertWeight(normal.Weight(x)); !(math.Abs(got-math.Max(x, lowest)) <= 1e-9) {
			t.Fatalf("the weight of %g belongs to %g", x, got)
		}
	}
}

func TestShares(t *testing.T) {
	check(t, "a third", EqualShare(0.03, 3), 0.01, 1e-15)
	check(t, "first segment", SegmentShare(0.05, 1), 0.05*6/(math.Pi*math.Pi), 1e-15)
	sum := 0.0
	for j := 1; j <= 100_000; j++ {
		sum += SegmentShare(0.05, j)
	}
	if !(sum < 0.05 && sum > 0.04999) { // the rest is below 6/(pi^2 100000) of it
		t.Errorf("the shares of 100,000 segments add up to %.9f, want just below 0.05", sum)
	}
}
