package moment

import (
	"encoding/csv"
	"errors"
	"math"
	"math/rand/v2"
	"os"
	"slices"
	"strconv"
	"testing"
)

// The weighted mean of miles a gallon with cylinders for weights: svymean of R's package
// survey 4.1-1 (R 4.2.2), testdata/reference/reference.R.
func TestWeightedMeanAgainstR(t *testing.T) {
	const value, se = 18.654545454545456, 0.91895317728514314
	f, err := os.Open("../../testdata/reference/mtcars.csv")
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	rows, err := csv.NewReader(f).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	mpg, cyl := slices.Index(rows[0], "mpg"), slices.Index(rows[0], "cyl")
	shape, _ := NewShape(1, [][2]int{{0, 0}}, nil)
	cells, weights := []*Cell{NewCell(shape), NewCell(shape), NewCell(shape)}, []float64{4, 6, 8}
	for _, r := range rows[1:] {
		x, _ := strconv.ParseFloat(r[mpg], 64)
		w, _ := strconv.ParseFloat(r[cyl], 64)
		cells[slices.Index(weights, w)].Add([]float64{x})
	}
	c, err := Weighted(cells, weights)
	if err != nil {
		t.Fatal(err)
	}
	n := float64(c.Units())
	if got := c.Mean(0); math.Abs(got-value) > 1e-13*value {
		t.Errorf("mean %.16g, want %.16g", got, value)
	}
	if got := math.Sqrt(c.Co(0, 0) / n / (n - 1)); math.Abs(got-se) > 1e-13*se {
		t.Errorf("standard error %.16g, want %.16g", got, se)
	}
}

// TestWeightedIsOfThoseValues: the weighted cell is that of the values its docstring names,
// to the last digits, whatever the origins.
func TestWeightedIsOfThoseValues(t *testing.T) {
	rng := rand.New(rand.NewPCG(5, 8))
	shape, _ := NewShape(3, [][2]int{{2, 2}, {0, 2}}, [][3]int{{0, 0, 1}, {0, 1, 1}, {1, 1, 1}})
	for trial := range 50 {
		far := math.Pow(10, float64(trial%6))
		cells, weights := make([]*Cell, 4), []float64{1, 2, 8, 1024}
		var z [][]float64
		var w []float64
		for k := range cells {
			cells[k] = NewCell(shape)
			for i := range rng.IntN(30) {
				x := []float64{far + rng.NormFloat64(), rng.ExpFloat64(), float64(k) + rng.NormFloat64()}
				if i == 0 && k != 1 {
					if err := cells[k].SetOrigin(x); err != nil {
						t.Fatal(err)
					}
				}
				cells[k].Add(x)
				z, w = append(z, x), append(w, weights[k])
			}
		}
		got, err := Weighted(cells, weights)
		if err != nil {
			t.Fatal(err)
		}
		if int(got.Units()) != len(z) {
			t.Fatalf("%d units, want %d", got.Units(), len(z))
		}
		if len(z) < 3 {
			continue
		}
		var total float64
		mean := make([]float64, 3)
		for i := range z {
			total += w[i]
		}
		for i := range z {
			for j := range mean {
				mean[j] += w[i] / total * z[i][j]
			}
		}
		want := NewCell(shape)
		for i := range z {
			v := make([]float64, 3)
			for j := range v {
				v[j] = mean[j] + w[i]*float64(len(z))/total*(z[i][j]-mean[j])
			}
			want.Add(v)
		}
		tol := 1e-13 * far * float64(len(z))
		for j := range 3 {
			if d := math.Abs(got.Mean(j) - mean[j]); d > tol {
				t.Errorf("mean %d is off by %g", j, d)
			}
		}
		scale := func(parts ...int) float64 {
			s := 1.0
			for _, j := range parts {
				s *= math.Sqrt(want.Co(j, j))
			}
			return s
		}
		for _, p := range shape.Pairs() {
			if d := math.Abs(got.Co(p[0], p[1]) - want.Co(p[0], p[1])); d > 1e-10*far*scale(p[0], p[1]) {
				t.Errorf("co-moment %v is off by %g of %g", p, d, want.Co(p[0], p[1]))
			}
		}
		for _, q := range shape.Triples() {
			if d := math.Abs(got.Third(q[0], q[1], q[2]) - want.Third(q[0], q[1], q[2])); d > 1e-10*far*scale(q[:]...) {
				t.Errorf("third moment %v is off by %g of %g", q, d, want.Third(q[0], q[1], q[2]))
			}
		}
	}
}

// TestEqualWeightsAreNone: one weight for all is none, bit for bit, and empty cells do not count.
func TestEqualWeightsAreNone(t *testing.T) {
	shape, _ := NewShape(1, nil, [][3]int{{0, 0, 0}})
	c := NewCell(shape)
	for i := range 100 {
		c.Add([]float64{float64(i * i)})
	}
	w, err := Weighted([]*Cell{NewCell(shape), c}, []float64{1, 8})
	if err != nil {
		t.Fatal(err)
	}
	if w.Mean(0) != c.Mean(0) || w.Co(0, 0) != c.Co(0, 0) || w.Third(0, 0, 0) != c.Third(0, 0, 0) || w.Units() != 100 {
		t.Error("the weight of all units changes something")
	}
	if w, err := Weighted([]*Cell{NewCell(shape)}, []float64{1}); err != nil || w.Units() != 0 {
		t.Errorf("no units: %v", err)
	}
	other, _ := NewShape(2, nil, nil)
	if _, err := Weighted([]*Cell{c, NewCell(other)}, []float64{1, 2}); !errors.Is(err, ErrShape) {
		t.Errorf("cells of different shapes: %v", err)
	}
	if _, err := Weighted([]*Cell{c}, nil); err == nil {
		t.Error("a cell without a weight was accepted")
	}
}
