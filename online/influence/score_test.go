package influence

import (
	"bufio"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"strings"
	"testing"

	"gonum.org/v1/gonum/stat/distuv"
)

func ends(t *testing.T, what string, lo, hi, wantLo, wantHi, abs, rel float64) {
	t.Helper()
	for _, p := range [2][2]float64{{lo, wantLo}, {hi, wantHi}} {
		if !(math.Abs(p[0]-p[1]) <= abs+rel*math.Abs(p[1])) {
			t.Errorf("%s: (%.15g, %.15g), want (%.15g, %.15g)", what, lo, hi, wantLo, wantHi)
			return
		}
	}
}

const z95 = 1.959963984540054

func TestWilson(t *testing.T) {
	for _, tt := range []struct {
		source       string
		x, n, lo, hi float64
		abs          float64
	}{
		{"Newcombe 1998, Stat. Med. 17:857, table I, method 3", 81, 263, 0.2553, 0.3662, 5e-5},
		{"Newcombe 1998, Stat. Med. 17:857, table I, method 3", 0, 20, 0, 0.1611, 5e-5},
		{"R 4.2.2, prop.test(15, 148, correct = FALSE)", 15, 148, 0.062386399530736283, 0.160487241723308, 1e-12},
		{"R 4.2.2, prop.test(1, 29, correct = FALSE)", 1, 29, 0.006113214292762661, 0.17175521879320282, 1e-12},
		{"R 4.2.2, prop.test(20, 20, correct = FALSE)", 20, 20, 0.83887484194718065, 1, 1e-12},
	} {
		lo, hi := wilson(tt.x, tt.n, z95)
		ends(t, tt.source, lo, hi, tt.lo, tt.hi, tt.abs, 0)
	}
	for n := 1.0; n < 1000; n++ {
		if lo, _ := wilson(0, n, z95); lo != 0 {
			t.Fatalf("0/%g: lower end %g", n, lo)
		}
		if _, hi := wilson(n, n, z95); hi != 1 {
			t.Fatalf("%g/%g: upper end %.17g", n, n, hi)
		}
	}
}

// Newcombe 1998, Stat. Med. 17:873, table II, the method of Miettinen and Nurminen, to
// the four decimals printed there (as quoted in public test suites, the paper not
// opened).
func TestScoreDifferenceAsPublished(t *testing.T) {
	for _, tt := range [][6]float64{
		{56, 70, 48, 80, 0.0528, 0.3382},
		{9, 10, 3, 10, 0.1700, 0.8406},
		{6, 7, 2, 7, 0.0342, 0.8534},
		{5, 56, 0, 29, -0.0326, 0.1933},
		{0, 10, 0, 20, -0.1658, 0.2844},
		{0, 10, 0, 10, -0.2879, 0.2879},
		{10, 10, 0, 20, 0.7156, 1},
		{10, 10, 0, 10, 0.6636, 1},
	} {
		lo, hi := scoreDifference(tt[0], tt[1], tt[2], tt[3], z95)
		ends(t, fmt.Sprint(tt[:4]), lo, hi, tt[4], tt[5], 5.1e-5, 0)
	}
}

// testdata/reference/score.py: from the definition, in 40 digits, with mpmath 1.4.1.
func TestScoreIntervalsAgainstTheirDefinition(t *testing.T) {
	f, err := os.Open("../../testdata/reference/score.txt")
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	cases := 0
	for lines := bufio.NewScanner(f); lines.Scan(); {
		if strings.HasPrefix(lines.Text(), "#") {
			continue
		}
		var x1, n1, x0, n0, level, lo, hi, ratioLo, ratioHi float64
		if _, err := fmt.Sscan(lines.Text(), &x1, &n1, &x0, &n0, &level, &lo, &hi, &ratioLo, &ratioHi); err != nil {
			t.Fatalf("%s: %v", lines.Text(), err)
		}
		cases++
		z := z95
		if level == 0.99 {
			z = 2.5758293035489004
		}
		gotLo, gotHi := scoreDifference(x1, n1, x0, n0, z)
		ends(t, "difference "+lines.Text(), gotLo, gotHi, lo, hi, 1e-14, 1e-9)
		gotLo, gotHi = scoreRatio(x1, n1, x0, n0, z)
		if math.IsNaN(ratioHi) {
			if !math.IsInf(gotHi, 1) {
				t.Errorf("ratio %s: upper end %g without successes", lines.Text(), gotHi)
			}
			continue
		}
		ends(t, "ratio "+lines.Text(), gotLo, gotHi, ratioLo, ratioHi, 0, 1e-9)
	}
	if cases != 22 {
		t.Errorf("%d cases", cases)
	}
}

// The closed form has the likelihood's maximum, also at the borders.
func TestNullForDifferenceIsMostLikely(t *testing.T) {
	rng := rand.New(rand.NewPCG(1, 2))
	xlog := func(x, p float64) float64 {
		if x == 0 {
			return 0
		}
		return x * math.Log(p)
	}
	for range 20000 {
		n1, n0 := float64(1+rng.IntN(3000)), float64(1+rng.IntN(300))
		x1, x0 := math.Floor(rng.Float64()*rng.Float64()*(n1+1)), math.Floor(rng.Float64()*(n0+1))
		delta := 2*rng.Float64() - 1
		likelihood := func(p float64) float64 {
			return xlog(x1, p+delta) + xlog(n1-x1, 1-p-delta) + xlog(x0, p) + xlog(n0-x0, 1-p)
		}
		p := nullForDifference(x1, n1, x0, n0, delta)
		if p < 0 || p > 1 || p+delta < -1e-15 || p+delta > 1+1e-15 {
			t.Fatalf("p0 = %g with delta %g", p, delta)
		}
		at := likelihood(p)
		for _, step := range []float64{-1e-4, 1e-4, -1e-2, 1e-2} {
			q := p + step
			if q > 0 && q < 1 && q+delta > 0 && q+delta < 1 && likelihood(q) > at+1e-9*math.Abs(at) {
				t.Fatalf("%g/%g, %g/%g, delta %g: likelihood %g at %g, %g at %g", x1, n1, x0, n0, delta, at, p, likelihood(q), q)
			}
		}
	}
}

// Symmetry: exchanging the arms, or successes and failures, mirrors the intervals.
func TestScoreIntervalsMirror(t *testing.T) {
	rng := rand.New(rand.NewPCG(3, 4))
	for range 500 {
		n1, n0 := float64(5+rng.IntN(200)), float64(5+rng.IntN(200))
		x1, x0 := float64(rng.IntN(int(n1)+1)), float64(rng.IntN(int(n0)+1))
		lo, hi := scoreDifference(x1, n1, x0, n0, z95)
		d := x1/n1 - x0/n0
		if !(-1 <= lo && lo <= d && d <= hi && hi <= 1) {
			t.Fatalf("%g/%g, %g/%g: (%g, %g) about %g", x1, n1, x0, n0, lo, hi, d)
		}
		back, forth := scoreDifference(x0, n0, x1, n1, z95)
		ends(t, "exchanged arms", -forth, -back, lo, hi, 1e-12, 0)
		back, forth = scoreDifference(n1-x1, n1, n0-x0, n0, z95)
		ends(t, "failures", -forth, -back, lo, hi, 1e-12, 0)
		lo, hi = scoreRatio(x1, n1, x0, n0, z95)
		back, forth = scoreRatio(x0, n0, x1, n1, z95)
		if x1 > 0 && x0 > 0 {
			ends(t, "ratio of exchanged arms", 1/forth, 1/back, lo, hi, 0, 1e-9)
		} else if x1 > 0 && (math.Abs(1/forth-lo) > 1e-9*lo || !math.IsInf(hi, 1)) {
			t.Fatalf("%g/%g over %g/%g: (%g, %g), the other way (%g, %g)", x1, n1, x0, n0, lo, hi, back, forth)
		}
	}
}

// R 4.2.2 qt, through testdata/reference/reference.R.
func TestStudentQuantile(t *testing.T) {
	f, err := os.Open("../../testdata/reference/reference.txt")
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	cases := 0
	for lines := bufio.NewScanner(f); lines.Scan(); {
		var p, freedom, want float64
		if n, _ := fmt.Sscanf(strings.NewReplacer("(", " ", ",", " ", ")", " ").Replace(lines.Text()), "qt %g %g %g", &p, &freedom, &want); n != 3 {
			continue
		}
		cases++
		// A tail written as 1 - p has the digits that p has, which at p = .999999 are 10.
		if got := StudentUpper(1-p, freedom); math.Abs(got/want-1) > 1e-11+1e-16/(1-p) {
			t.Errorf("qt(%g, %g) = %.15g, want %.15g", p, freedom, got, want)
		}
	}
	if cases != 60 {
		t.Errorf("%d cases", cases)
	}
	// Between them, against the inverse by other means.
	for freedom := 1.0; freedom < 60; freedom += 0.37 {
		for _, tail := range []float64{.4, .1, .025, .0005, 1e-6, 1e-7} {
			want := -distuv.StudentsT{Sigma: 1, Nu: freedom}.Quantile(tail)
			if got := StudentUpper(tail, freedom); math.Abs(got/want-1) > 1e-11 {
				t.Errorf("upper %g at %g degrees: %.15g, want %.15g", tail, freedom, got, want)
			}
		}
	}
}
