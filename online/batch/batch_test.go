package batch

import (
	"bytes"
	"encoding/json"
	"math"
	"reflect"
	"strings"
	"testing"

	"pgregory.net/rapid"
)

// Data sets of R's datasets package: lengths of 141 American rivers, "great"
// discoveries a year 1860 to 1959, flow of the Nile 1871 to 1970.
var (
	rivers = []float64{735, 320, 325, 392, 524, 450, 1459, 135, 465, 600, 330, 336, 280, 315, 870, 906, 202, 329, 290,
		1000, 600, 505, 1450, 840, 1243, 890, 350, 407, 286, 280, 525, 720, 390, 250, 327, 230, 265, 850, 210, 630, 260,
		230, 360, 730, 600, 306, 390, 420, 291, 710, 340, 217, 281, 352, 259, 250, 470, 680, 570, 350, 300, 560, 900, 625,
		332, 2348, 1171, 3710, 2315, 2533, 780, 280, 410, 460, 260, 255, 431, 350, 760, 618, 338, 981, 1306, 500, 696, 605,
		250, 411, 1054, 735, 233, 435, 490, 310, 460, 383, 375, 1270, 545, 445, 1885, 380, 300, 380, 377, 425, 276, 210,
		800, 420, 350, 360, 538, 1100, 1205, 314, 237, 610, 360, 540, 1038, 424, 310, 300, 444, 301, 268, 620, 215, 652,
		900, 525, 246, 360, 529, 500, 720, 270, 430, 671, 1770}
	discoveries = []float64{5, 3, 0, 2, 0, 3, 2, 3, 6, 1, 2, 1, 2, 1, 3, 3, 3, 5, 2, 4, 4, 0, 2, 3, 7, 12, 3, 10, 9, 2, 3,
		7, 7, 2, 3, 3, 6, 2, 4, 3, 5, 2, 2, 4, 0, 4, 2, 5, 2, 3, 3, 6, 5, 8, 3, 6, 6, 0, 5, 2, 2, 2, 6, 3, 4, 4, 2, 2, 4, 7,
		5, 3, 3, 0, 2, 2, 2, 1, 3, 4, 2, 2, 1, 1, 1, 2, 1, 4, 4, 3, 2, 1, 4, 1, 1, 1, 0, 0, 2, 0}
	nile = []float64{1120, 1160, 963, 1210, 1160, 1160, 813, 1230, 1370, 1140, 995, 935, 1110, 994, 1020, 960, 1180, 799,
		958, 1140, 1100, 1210, 1150, 1250, 1260, 1220, 1030, 1100, 774, 840, 874, 694, 940, 833, 701, 916, 692, 1020, 1050,
		969, 831, 726, 456, 824, 702, 1120, 1100, 832, 764, 821, 768, 845, 864, 862, 698, 845, 744, 796, 1040, 759, 781,
		865, 845, 944, 984, 897, 822, 1010, 771, 676, 649, 846, 812, 742, 801, 1040, 860, 874, 848, 890, 744, 749, 838,
		1050, 918, 986, 797, 923, 975, 815, 1020, 906, 901, 1170, 912, 746, 919, 718, 714, 740}
)

func newSeries(t testing.TB, scores int) *Series {
	t.Helper()
	s, err := New(scores)
	if err != nil {
		t.Fatal(err)
	}
	return s
}

func differences(x []float64) []float64 {
	d := make([]float64, len(x)-1)
	for i := range d {
		d[i] = x[i+1] - x[i]
	}
	return d
}

func sum(x []float64) (s float64) {
	for _, v := range x {
		s += v
	}
	return s
}

// Values by R 4.2.2 acf and var, testdata/reference.R.
func TestVarianceOfAMean(t *testing.T) {
	for _, tt := range []struct {
		name         string
		x            []float64
		batches      int
		r1, variance float64
		dependent    bool
		whyHas       string
	}{
		{"discoveries", discoveries, 100, 0.2741351888667991, 0.1115531189407496, false, ""},
		{"their differences", differences(discoveries), 99, -0.4800199064975415, 0.07387626002344617, false, ""},
		{"Nile", nile, 100, 0.4984081841330295, math.NaN(), true, "batches of 1 steps still depend on each other (correlation 0.50"},
		{"rivers", rivers, 70, 0.4813758902493145, math.NaN(), true, "batches of 2 steps"},
		{"too few", nile[:63], 63, math.NaN(), math.NaN(), true, "63 of the 64 batches"},
		{"none", nil, 0, math.NaN(), math.NaN(), true, "0 of the 64 batches"},
		{"constant", make([]float64, 80), 80, math.NaN(), math.NaN(), true, "do not vary"},
	} {
		s := newSeries(t, 1)
		for _, x := range tt.x {
			s.Add(1, []float64{x})
		}
		e := s.Variance([]float64{1}, []float64{sum(tt.x) / float64(max(1, len(tt.x)))})
		if e.Batches != tt.batches || !math.IsNaN(tt.r1) && math.Abs(e.Correlation-tt.r1) > 1e-12 {
			t.Errorf("%s: %d batches, correlation %.15g, want %d, %.15g", tt.name, e.Batches, e.Correlation, tt.batches, tt.r1)
		}
		if tt.dependent {
			if !math.IsNaN(e.Variance) || !math.IsNaN(e.DF) || !strings.Contains(e.Why, tt.whyHas) {
				t.Errorf("%s: %+v, want a reason with %q", tt.name, e, tt.whyHas)
			}
			continue
		}
		if !(math.Abs(e.Variance-tt.variance) <= 1e-12*tt.variance) || e.DF != float64(tt.batches-1) || e.Why != "" {
			t.Errorf("%s: %+v, want variance %.15g", tt.name, e, tt.variance)
		}
	}
}

// A ratio of means over units, several units a step, batches joined once and one step
// left over. R 4.2.2, testdata/reference.R.
func TestVarianceOfARatio(t *testing.T) {
	s := newSeries(t, 2)
	var n, x, w float64
	for i, v := range rivers {
		units := 1 + (i+1)%3
		u := float64(units * (1 + (i+1)%7))
		s.Add(int64(units), []float64{v, u})
		n, x, w = n+float64(units), x+v, w+u
	}
	if s.Size != 2 || s.Open.Steps != 1 || s.Steps() != 141 {
		t.Errorf("batches of %d steps, %d open, %d in all", s.Size, s.Open.Steps, s.Steps())
	}
	mx, mw := x/n, w/n
	e := s.Variance([]float64{1 / mw, -mx / (mw * mw)}, []float64{mx, mw})
	if e.Batches != 70 || math.Abs(e.Correlation-0.2913138058020339) > 1e-12 || math.Abs(e.Variance/114.4943676711325-1) > 1e-11 {
		t.Errorf("%+v, want 70 batches, correlation 0.2913138058020339, variance 114.4943676711325", e)
	}
}

// Whatever is added, the batches are the series cut into equal lengths, 64 to 127 of them from the 64th step on.
func TestBatchesCutTheSeries(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		s := newSeries2(t)
		n := rapid.IntRange(0, 1200).Draw(t, "steps")
		seed := rapid.Uint64().Draw(t, "seed")
		step := func(i int) (int64, float64) { // cheap, and never twice alike
			h := (seed + uint64(i)) * 0x9e3779b97f4a7c15
			return int64(h >> 62), float64(h>>40) - 1<<23
		}
		var reference []*Series
		for i := range n {
			u, x := step(i)
			s.Add(u, []float64{x, -2 * x})
			if i == n/2 {
				reference = append(reference, s.Clone())
			}
		}
		if s.Steps() != int64(n) || n >= Least && (len(s.Units) < Least || len(s.Units) >= Most) {
			t.Fatalf("%d steps: %d batches of %d and %d open", n, len(s.Units), s.Size, s.Open.Steps)
		}
		at := 0
		for b := range len(s.Units) + 1 {
			length := s.Size
			if b == len(s.Units) {
				length = s.Open.Steps
			}
			var units int64
			var x float64
			for range length {
				u, v := step(at)
				units, x, at = units+u, x+v, at+1
			}
			if b == len(s.Units) {
				if s.Open.Units != units || s.Open.High[0]+s.Open.Low[0] != x {
					t.Fatalf("open batch: %+v, want %d units, sum %g", s.Open, units, x)
				}
			} else if s.Units[b] != units || s.Sums[2*b] != x || s.Sums[2*b+1] != -2*x {
				t.Fatalf("batch %d of %d: %d units, sum %g, want %d, %g", b, len(s.Units), s.Units[b], s.Sums[2*b], units, x)
			}
		}
		// The clone made half way was not touched since, and goes on alike.
		for _, c := range reference {
			for i := n/2 + 1; i < n; i++ {
				u, x := step(i)
				c.Add(u, []float64{x, -2 * x})
				if i%37 == 0 {
					c = throughBytes(t, c)
				}
			}
			if !reflect.DeepEqual(c, s) {
				t.Fatalf("a clone that went on is %+v, want %+v", c, s)
			}
		}
	})
}

func newSeries2(t *rapid.T) *Series {
	s, err := New(2)
	if err != nil {
		t.Fatal(err)
	}
	return s
}

func throughBytes(t *rapid.T, s *Series) *Series {
	b, err := s.AppendBinary([]byte("before"))
	if err != nil {
		t.Fatal(err)
	}
	got, rest, err := Decode(append(b[len("before"):], "after"...))
	if err != nil || !reflect.DeepEqual(got, s) || string(rest) != "after" {
		t.Fatalf("%+v came back as %+v, rest %q, %v", s, got, rest, err)
	}
	j, err := json.Marshal(s)
	if err != nil {
		t.Fatal(err)
	}
	back := new(Series)
	if err := json.Unmarshal(j, back); err != nil || !reflect.DeepEqual(back, s) {
		t.Fatalf("%+v came back from JSON as %+v, %v", s, back, err)
	}
	return got
}

// Sums in an open batch are compensated: a large step and its opposite leave no trace.
func TestOpenSums(t *testing.T) {
	s := newSeries(t, 1)
	for range Most + 1 {
		s.Add(1, []float64{0})
	}
	// The open batch has one step of two; the next one would close it, so double first.
	for s.Size < 8 {
		s.Add(1, []float64{0})
	}
	for _, x := range []float64{1, 1e100, 1, -1e100} {
		s.Add(1, []float64{x})
	}
	for s.Open.Steps > 0 {
		s.Add(1, []float64{0})
	}
	if got := s.Sums[len(s.Sums)-1]; got != 2 {
		t.Errorf("1 + 1e100 + 1 - 1e100 = %g, want 2", got)
	}
}

func TestDecodeRefuses(t *testing.T) {
	if _, err := New(0); err == nil {
		t.Error("a series without scores")
	}
	s := newSeries(t, 2)
	for i := range 300 {
		s.Add(1, []float64{float64(i), 1})
	}
	full, _ := s.AppendBinary(nil)
	for i := range full {
		if _, _, err := Decode(full[:i]); err == nil {
			t.Errorf("accepted the first %d of %d bytes", i, len(full))
		}
	}
	for name, change := range map[string]func(*Series){
		"size 3":           func(s *Series) { s.Size = 3 },
		"size 0":           func(s *Series) { s.Size = 0 },
		"too few batches":  func(s *Series) { s.Units, s.Sums = s.Units[:63], s.Sums[:126] },
		"open batch full":  func(s *Series) { s.Open.Steps = s.Size },
		"too many batches": func(s *Series) { s.Units, s.Sums = make([]int64, Most), make([]float64, 2*Most) },
		"negative units":   func(s *Series) { s.Units[0] = -1 },
	} {
		bad := s.Clone()
		change(bad)
		b, _ := bad.AppendBinary(nil)
		if _, _, err := Decode(b); err == nil {
			t.Errorf("%s: accepted", name)
		}
	}
}

func FuzzDecode(f *testing.F) {
	for _, n := range []int{0, 3, 300} {
		s := newSeries(f, 2)
		for i := range n {
			s.Add(1, []float64{float64(i), 1})
		}
		b, _ := s.AppendBinary(nil)
		f.Add(b)
	}
	f.Fuzz(func(t *testing.T, in []byte) {
		s, rest, err := Decode(in)
		if err != nil {
			return
		}
		if b, _ := s.AppendBinary(nil); !bytes.Equal(append(b, rest...), in) {
			t.Fatalf("decode then encode changed %x to %x", in, b)
		}
		if s.Scores < 1000 {
			s.Add(1, make([]float64, s.Scores))
			s.Variance(make([]float64, s.Scores), make([]float64, s.Scores))
		}
	})
}

// Values by R 4.2.2 pt and qnorm with log.p, and beyond their range by uniroot over
// the log tail; testdata/reference.R.
func TestEquivalentZ(t *testing.T) {
	for _, tt := range []struct{ t, df, want float64 }{
		{1e-08, 63, 9.96039781714153e-09},
		{0.1, 63, 0.09960003057691441},
		{0.8, 63, 0.7948218577864611},
		{2, 63, 1.961542573946173},
		{2, 127, 1.980622542411876},
		{-3, 100, -2.928326898811431},
		{4.5, 63, 4.174132056176861},
		{30, 63, 13.06636169096751},
		{1000, 63, 24.63945367281417},
		{1.5, 1, 0.8883842702676937},
		{50, 2.5, 3.940520650399947},
		{7.5, 63, 6.316536587630902},
		{30, 1000, 25.3288402022544},
		{1e6, 63, 38.42641111565509},
		{1e100, 63, 169.5448007191239},
	} {
		rel := 1e-10
		if tt.t == 1e-8 {
			rel = 1e-7 // a tail near 1/2 costs R the digits
		}
		if got := EquivalentZ(tt.t, tt.df); !(math.Abs(got-tt.want) <= rel*math.Abs(tt.want)) {
			t.Errorf("EquivalentZ(%g, %g) = %.15g, want %.15g", tt.t, tt.df, got, tt.want)
		}
	}
	for _, tt := range []struct{ t, df, want float64 }{
		{0, 63, 0}, {math.Inf(-1), 63, math.Inf(-1)}, {2, math.Inf(1), 2}, {math.NaN(), 63, math.NaN()}, {2, 0, math.NaN()},
	} {
		if got := EquivalentZ(tt.t, tt.df); got != tt.want && !(math.IsNaN(got) && math.IsNaN(tt.want)) {
			t.Errorf("EquivalentZ(%g, %g) = %g, want %g", tt.t, tt.df, got, tt.want)
		}
	}
}

// It rises with t, without a step where the way of computing changes, and lies nearer 0.
func TestEquivalentZRises(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		x := math.Exp(rapid.Float64Range(-20, 200).Draw(t, "log t"))
		df := math.Exp(rapid.Float64Range(0, 9).Draw(t, "log df"))
		a, b := EquivalentZ(x, df), EquivalentZ(x*1.0001, df)
		if !(a > 0 && a < b && a < x && b/a < 1.0002) {
			t.Fatalf("z of t = %g and %g at %g degrees: %.15g and %.15g", x, x*1.0001, df, a, b)
		}
	})
}
