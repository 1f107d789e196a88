package influence

import "math"

// wilson returns the score interval of a probability for x successes in n trials.
//
//	out     0 <= lo <= x/n <= hi <= 1
//	source  Wilson 1927, JASA 22:209, without continuity correction
func wilson(x, n, z float64) (lo, hi float64) {
	p, z2 := x/n, z*z
	centre := (x + z2/2) / (n + z2)
	half := z / (n + z2) * math.Sqrt(n*p*(1-p)+z2/4)
	lo, hi = centre-half, centre+half
	if x == 0 {
		lo = 0
	}
	if x == n {
		hi = 1
	}
	return lo, hi
}

// scoreDifference returns the interval of p1 - p0 for x1 successes in n1 trials and
// x0 in n0: the differences that a score test does not reject, its variance taken at
// the probabilities most likely under each, times N/(N - 1).
//
//	source  Miettinen, Nurminen 1985, Stat. Med. 4:213
func scoreDifference(x1, n1, x0, n0, z float64) (lo, hi float64) {
	d := x1/n1 - x0/n0
	n := n1 + n0
	squared := func(delta float64) float64 {
		p0 := nullForDifference(x1, n1, x0, n0, delta)
		p1 := p0 + delta
		v := (p1*(1-p1)/n1 + p0*(1-p0)/n0) * n / (n - 1)
		return (d - delta) * (d - delta) / v
	}
	return edge(squared, z, d, -1), edge(squared, z, d, 1)
}

// nullForDifference returns the most likely p0 when p1 = p0 + delta. The likelihood's
// derivative times p0 (1-p0) p1 (1-p1) is a cubic with one root in range.
func nullForDifference(x1, n1, x0, n0, delta float64) float64 {
	n, x := n1+n0, x1+x0
	a := n
	b := (n1+2*n0)*delta - n - x
	c := (n0*delta-n-2*x0)*delta + x
	d := x0 * delta * (1 - delta)
	third := b / (3 * a)
	q := third*third*third - b*c/(6*a*a) + d/(2*a)
	p := math.Copysign(math.Sqrt(max(0, third*third-c/(3*a))), q)
	var root float64
	if p != 0 {
		angle := (math.Pi + math.Acos(min(1, max(-1, q/(p*p*p))))) / 3
		root = 2 * p * math.Cos(angle)
	}
	return min(min(1, 1-delta), max(max(0, -delta), root-third))
}

// scoreRatio returns the interval of p1 / p0, likewise; hi is infinite without
// successes in the denominator.
//
//	source  Miettinen, Nurminen 1985, Stat. Med. 4:213
func scoreRatio(x1, n1, x0, n0, z float64) (lo, hi float64) {
	n := n1 + n0
	squared := func(theta float64) float64 {
		b := n1*theta + x1 + n0 + x0*theta
		p0 := 2 * (x1 + x0) / (b + math.Sqrt(max(0, b*b-4*n*theta*(x1+x0)))) // the smaller root, without cancellation
		p0 = min(1, p0)
		p1 := min(1, theta*p0)
		v := (p1*(1-p1)/n1 + theta*theta*p0*(1-p0)/n0) * n / (n - 1)
		s := x1/n1 - theta*x0/n0
		return s * s / v
	}
	switch {
	case x0 == 0 && x1 == 0:
		return 0, math.Inf(1)
	case x0 == 0:
		// By symmetry of the arms: the inverse of the upper end the other way round.
		_, inverse := scoreRatio(x0, n0, x1, n1, z)
		return 1 / inverse, math.Inf(1)
	}
	at := x1 / n1 / (x0 / n0)
	if x1 > 0 {
		lo = edge(squared, z, at, 0)
	}
	top := max(1, 2*at)
	for !(squared(top) > z*z) {
		top *= 2
	}
	return lo, edge(squared, z, at, top)
}

// edge returns where squared, which rises from 0 at the estimate towards the end,
// passes z squared, to the last bits; the end itself if it does not.
func edge(squared func(float64) float64, z, at, end float64) float64 {
	in, out := at, end
	for {
		mid := in + (out-in)/2
		if mid == in || mid == out {
			return mid
		}
		if squared(mid) <= z*z {
			in = mid
		} else {
			out = mid
		}
	}
}
