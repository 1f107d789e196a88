package moment

import "math"

// A Sum is a running sum held as Hi + Lo, with |Lo| at most half a unit in the
// last place of Hi. The zero value is an empty sum.
//
// Each operation is in error by at most 2^-104 of the larger of its operand, its
// argument and its result. Where every addend is a multiple of some 2^-q and no
// partial sum reaches 2^(104-q), nothing is rounded at all: sums are then exact,
// the same bits in any order, and taking away what was added restores the bits.
// Counts, money in small units and products of short decimals on a binary grid
// are of that kind.
//
// Arguments must be finite, and small enough that no result overflows; products
// below 2^-969 lose their low part.
//
// Source: two-sum Knuth, The Art of Computer Programming 2, 4.2.2; two-product by
// fused multiply-add and double-word arithmetic after Dekker 1971, Numer. Math.
// 18:224 (from memory; the tests compare with exact arithmetic).
type Sum struct{ Hi, Lo float64 }

// Float returns the sum rounded to float64.
func (s Sum) Float() float64 { return s.Hi } // Lo is below half an ulp, so Hi is Hi + Lo rounded

// Add adds x.
func (s *Sum) Add(x float64) {
	x = float64(x) // rounds a caller's product here: inlining must not fuse it
	t := s.Hi + x
	b := t - s.Hi
	e := s.Lo + ((s.Hi - (t - b)) + (x - b))
	s.Hi = t + e
	s.Lo = e - (s.Hi - t)
}

// AddProduct adds the exact product x y.
func (s *Sum) AddProduct(x, y float64) {
	p := float64(x * y)
	s.addPair(p, math.FMA(x, y, -p))
}

// AddSum adds o.
func (s *Sum) AddSum(o Sum) { s.addPair(o.Hi, o.Lo) }

// Sub takes o away.
func (s *Sum) Sub(o Sum) { s.addPair(-o.Hi, -o.Lo) }

// addPair adds hi + lo, where lo is small against hi.
func (s *Sum) addPair(hi, lo float64) {
	t := s.Hi + hi
	b := t - s.Hi
	e := (s.Lo + lo) + ((s.Hi - (t - b)) + (hi - b))
	s.Hi = t + e
	s.Lo = e - (s.Hi - t)
}

// difference returns x - y exactly.
func difference(x, y float64) Sum {
	t := x - y
	b := t - x
	return Sum{t, (x - (t - b)) - (y + b)}
}

// times returns s o.
func (s Sum) times(o Sum) Sum {
	p := float64(s.Hi * o.Hi)
	e := math.FMA(s.Hi, o.Hi, -p) + (float64(s.Hi*o.Lo) + float64(s.Lo*o.Hi))
	hi := p + e
	return Sum{hi, e - (hi - p)}
}

// scaled returns s x.
func (s Sum) scaled(x float64) Sum { return s.times(Sum{Hi: x}) }

// over returns s / n, for n not zero.
func (s Sum) over(n float64) Sum {
	q := s.Hi / n
	p := float64(q * n)
	r := (((s.Hi - p) - math.FMA(q, n, -p)) + s.Lo) / n
	hi := q + r
	return Sum{hi, r - (hi - q)}
}
