package online

import (
	"bytes"
	"math"
	"math/rand/v2"
	"testing"

	"stillwell/online/moment"
	"stillwell/online/wire"
)

func someStrata(rng *rand.Rand, shape *moment.Shape) *strata {
	s := newStrata(shape)
	for range 60 {
		s.at(uint8(rng.IntN(4) * rng.IntN(3))).Add([]float64{float64(rng.IntN(100)), rng.Float64()})
	}
	return s
}

// TestStrataComeBack: what is merged and taken away again, and what is stored and read, is as before.
func TestStrataComeBack(t *testing.T) {
	rng := rand.New(rand.NewPCG(1, 2))
	shape, err := moment.NewShape(2, [][2]int{{0, 0}, {0, 1}}, nil)
	if err != nil {
		t.Fatal(err)
	}
	a, b := someStrata(rng, shape), someStrata(rng, shape)
	mean, weight := a.cell().Mean(0), a.weight()
	a.merge(b)
	if a.cell().Mean(0) == mean || a.weight() != weight+b.weight() || a.Units() != 120 {
		t.Error("merging does not count")
	}
	a.unmerge(b)
	if got := a.cell().Mean(0); got != mean || a.weight() != weight || a.Units() != 60 {
		t.Errorf("mean %g after merging and taking away, want %g", got, mean)
	}
	var w wire.Writer
	a.encode(&w)
	c := newStrata(shape)
	r := wire.NewReader(w.B)
	c.decode(r)
	if err := r.Done(); err != nil {
		t.Fatal(err)
	}
	if differ(a, c) != 0 || c.cell().Mean(1) != a.cell().Mean(1) {
		t.Error("strata differ when read again")
	}
	for n := range w.B {
		r := wire.NewReader(w.B[:n])
		newStrata(shape).decode(r)
		if r.Done() == nil {
			t.Errorf("the first %d of %d bytes were accepted", n, len(w.B))
		}
	}
}

// TestEffectiveNumbers: equal weights are worth all units, others the square of their sum over
// the sum of their squares, and to the variance that of their squares.
func TestEffectiveNumbers(t *testing.T) {
	shape, _ := moment.NewShape(1, nil, nil)
	s := newStrata(shape)
	for range 10 {
		s.at(3).Add([]float64{1})
	}
	if m, v := s.effective(); m != 10 || v != 10 || s.mixed() || s.weight() != 80 {
		t.Errorf("ten of weight 8 are worth %g and %g", m, v)
	}
	s.at(0).Add([]float64{1})
	m, v := s.effective()
	if want := 81. * 81 / 641; math.Abs(m-want) > 1e-12 {
		t.Errorf("worth %g, want %g", m, want)
	}
	if want := 641. * 641 / 40961; math.Abs(v-want) > 1e-12 {
		t.Errorf("variance worth %g, want %g", v, want)
	}
}

// TestDaysWeigh: to a series of days, a unit of weight 4 is four alike.
func TestDaysWeigh(t *testing.T) {
	one, four := newSeries(1), newSeries(1)
	for day := range int64(5) {
		u := unit{Done: Done{At: day * wholeDay, Power: 2}, z: []float64{float64(day) + .5}}
		one.addUnit(&u, false)
		u.Power = 0
		for range 4 {
			four.addUnit(&u, false)
		}
	}
	var a, b wire.Writer
	one.encode(&a)
	four.encode(&b)
	if !bytes.Equal(a.B, b.B) {
		t.Error("a unit of weight 4 is not four alike")
	}
}
