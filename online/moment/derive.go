package moment

import (
	"fmt"
	"math"
)

// Mean returns the mean of component i; not a number for an empty cell.
func (c *Cell) Mean(i int) float64 {
	if c.n == 0 {
		return math.NaN()
	}
	m := c.sums[i].over(float64(c.n))
	if c.origin != nil {
		m.Add(c.origin[i])
	}
	return m.Float()
}

// Co returns the co-moment sum (z_i - m_i)(z_j - m_j), not divided by anything;
// i == j gives the sum of squared deviations, never negative. What lies below the
// rounding of the sums, 2^-104 n of what was summed, is exactly zero: equal scores
// have no spread. Panics if the shape does not keep the pair.
func (c *Cell) Co(i, j int) float64 {
	at := c.shape.Pair(i, j)
	if at < 0 {
		panic(fmt.Sprintf("moment: the shape keeps no pair (%d, %d)", i, j))
	}
	return c.co(i, j, at).Float()
}

// co is Co before it is rounded; at is the pair's place in the shape.
func (c *Cell) co(i, j, at int) Sum {
	if c.n < 2 {
		return Sum{}
	}
	n := float64(c.n)
	raw := c.sums[c.shape.components+at]
	square := c.sums[i].times(c.sums[j]).over(n)
	co := raw
	co.Sub(square)
	x := co.Float()
	if math.Abs(x) <= n*0x1p-104*max(math.Abs(raw.Hi), math.Abs(square.Hi)) || i == j && x < 0 {
		return Sum{}
	}
	return co
}

// Third returns the third central moment sum (z_i - m_i)(z_j - m_j)(z_k - m_k), not
// divided by anything. Panics if the shape does not keep the triple.
func (c *Cell) Third(i, j, k int) float64 {
	at := c.shape.Triple(i, j, k)
	if at < 0 {
		panic(fmt.Sprintf("moment: the shape keeps no triple (%d, %d, %d)", i, j, k))
	}
	if c.n < 2 {
		return 0
	}
	n := float64(c.n)
	b := c.sums[c.shape.components:]
	mi, mj, mk := c.sums[i].over(n), c.sums[j].over(n), c.sums[k].over(n)
	t := b[len(c.shape.pairs)+at]
	t.Sub(mi.times(b[c.shape.Pair(j, k)]))
	t.Sub(mj.times(b[c.shape.Pair(i, k)]))
	t.Sub(mk.times(b[c.shape.Pair(i, j)]))
	t.AddSum(mi.times(mj).times(mk).scaled(2 * n))
	return t.Float()
}

// Means writes the means of the listed components to dst.
func (c *Cell) Means(components []int, dst []float64) {
	for at, i := range components {
		dst[at] = c.Mean(i)
	}
}

// Comoments writes the co-moments of the listed components to dst, a square matrix
// in row order.
func (c *Cell) Comoments(components []int, dst []float64) {
	size := len(components)
	for a, i := range components {
		for b, j := range components[:a+1] {
			x := c.Co(i, j)
			dst[a*size+b], dst[b*size+a] = x, x
		}
	}
}

// MeanCovariance writes the covariance of the means of the listed components, their
// co-moments over n (n - 1), to high, a square matrix in row order, and what rounding leaves
// of it to low. Where a combination of components varies far less than they do, as
// the numerator of a ratio less the ratio times its denominator may, its variance lies in low.
// Panics if the shape does not keep a pair.
func (c *Cell) MeanCovariance(components []int, high, low []float64) {
	size := len(components)
	n := float64(c.n)
	for a, i := range components {
		for b, j := range components[:a+1] {
			at := c.shape.Pair(i, j)
			if at < 0 {
				panic(fmt.Sprintf("moment: the shape keeps no pair (%d, %d)", i, j))
			}
			v := c.co(i, j, at).over(n * (n - 1))
			high[a*size+b], low[a*size+b] = v.Hi, v.Lo
			high[b*size+a], low[b*size+a] = v.Hi, v.Lo
		}
	}
}

// Form returns f' C g for a square matrix C in row order, given as high + low, without losing
// what cancels between its terms: what lies below 2^-90 of them is exactly zero, so that scores in
// fixed proportion leave no variance and not a tiny one.
func Form(high, low, f, g []float64) float64 {
	var sum Sum
	var size float64
	for i, x := range f {
		if x == 0 {
			continue
		}
		for j, y := range g {
			var w Sum
			w.AddProduct(x, y)
			term := w.times(Sum{high[i*len(f)+j], low[i*len(f)+j]})
			sum.AddSum(term)
			size += math.Abs(term.Hi)
		}
	}
	if math.Abs(sum.Hi) <= 0x1p-90*size {
		return 0
	}
	return sum.Float()
}
