package online

import (
	"cmp"
	"fmt"
	"math"

	"stillwell/online/moment"
	"stillwell/online/wire"
)

// strata are the sums of a group's units, those of each weight apart: so whatever a weighted
// mean and its variance need follows from the same sums as without weights, and until a study
// is sampled there is one stratum and nothing to pay.
type strata struct {
	shape *moment.Shape
	cells []*moment.Cell // by power of two of the weight; nil where there is no unit of it
	whole *moment.Cell   // all strata as a weighted mean sees them; nil until asked for
}

func newStrata(shape *moment.Shape) *strata {
	return &strata{shape: shape, cells: []*moment.Cell{moment.NewCell(shape)}}
}

// at is the stratum of a weight, about to change.
func (s *strata) at(power uint8) *moment.Cell {
	s.whole = nil
	for len(s.cells) <= int(power) {
		s.cells = append(s.cells, nil)
	}
	if s.cells[power] == nil {
		s.cells[power] = moment.NewCell(s.shape)
	}
	return s.cells[power]
}

// each calls f for every stratum with units.
func (s *strata) each(f func(weight float64, c *moment.Cell)) {
	for power, c := range s.cells {
		if c != nil && c.Units() > 0 {
			f(math.Ldexp(1, power), c)
		}
	}
}

// Units is the number of units kept.
func (s *strata) Units() (n int64) {
	s.each(func(_ float64, c *moment.Cell) { n += c.Units() })
	return n
}

// weight is how many units those kept stand for.
func (s *strata) weight() (sum float64) {
	s.each(func(w float64, c *moment.Cell) { sum += w * float64(c.Units()) })
	return sum
}

// mixed tells whether units are of different weights.
func (s *strata) mixed() bool {
	n := 0
	s.each(func(float64, *moment.Cell) { n++ })
	return n > 1
}

// cell is all units together: as they are if all have one weight, else what they are to a
// weighted mean. It is not to be changed.
func (s *strata) cell() *moment.Cell {
	if s.whole != nil {
		return s.whole
	}
	var cells []*moment.Cell
	var weights []float64
	s.each(func(w float64, c *moment.Cell) { cells, weights = append(cells, c), append(weights, w) })
	switch len(cells) {
	case 0:
		return s.cells[0]
	case 1:
		return cells[0]
	}
	var err error
	s.whole, err = moment.Weighted(cells, weights)
	must(err)
	return s.whole
}

// effective is how many units of one weight would tell as much: of a mean, and of its
// variance.
//
//	source  Kish 1965, Survey Sampling, 11.7 (from memory), for the first; the second is
//	        Satterthwaite's for squares of normal scores
func (s *strata) effective() (ofMean, ofVariance float64) {
	if !s.mixed() {
		n := float64(s.Units())
		return n, n
	}
	var w1, w2, w4 float64
	s.each(func(w float64, c *moment.Cell) {
		n := float64(c.Units())
		w1, w2, w4 = w1+n*w, w2+n*w*w, w4+n*w*w*w*w
	})
	return w1 * w1 / w2, w2 * w2 / w4
}

func (s *strata) merge(o *strata) {
	for power, c := range o.cells {
		if c != nil && c.Units() > 0 {
			must(s.at(uint8(power)).Merge(c))
		}
	}
}

func (s *strata) unmerge(o *strata) {
	for power, c := range o.cells {
		if c != nil && c.Units() > 0 {
			must(s.at(uint8(power)).Unmerge(c))
		}
	}
}

func (s *strata) encode(w *wire.Writer) {
	n := 0
	for _, c := range s.cells {
		if c != nil {
			n++
		}
	}
	w.U64(uint64(n))
	for power, c := range s.cells {
		if c != nil {
			w.U8(uint8(power))
			b, _ := c.AppendBinary(nil) // never fails
			w.Bytes(b)
		}
	}
}

func (s *strata) decode(r *wire.Reader) {
	for range r.Count(2) {
		power := r.U8()
		c, rest, err := moment.DecodeCell(s.shape, r.Bytes())
		if r.Err() != nil {
			return
		}
		if err != nil || len(rest) > 0 || power > mostPower {
			r.Fail("sums of units of weight 2^%d: %v", power, cmp.Or(err, fmt.Errorf("%d bytes left over", len(rest))))
			return
		}
		s.at(power)
		s.cells[power] = c
	}
}
