package expr

import "slices"

// Shape classifies estimates by what exact methods need to know.
type Shape uint8

const (
	Smooth Shape = iota // none of the others
	Mean                // the mean of one score
	Ratio               // the mean of one score over that of another
	Linear              // a linear combination of means
)

func (s Shape) String() string { return [...]string{"smooth", "mean", "ratio", "linear"}[s] }

// A Combination is a linear combination of the means of an estimate's scores,
// Const + sum of Coef[i] m[i]. With no Coef it is none.
type Combination struct {
	Const float64
	Coef  []float64 // by score
}

// At returns the combination's value at m.
func (c Combination) At(m []float64) float64 {
	v := c.Const
	for i, k := range c.Coef {
		v += float64(k * m[i]) // rounded here, so that no platform fuses it with the sum
	}
	return v
}

// Shape says which kind of functional the estimate is.
func (e *Estimate) Shape() Shape {
	if _, ok := e.Mean(); ok {
		return Mean
	}
	if _, _, ok := e.Ratio(); ok {
		return Ratio
	}
	if _, ok := e.Linear(); ok {
		return Linear
	}
	return Smooth
}

// Mean returns the score whose mean the estimate is.
func (e *Estimate) Mean() (score int, ok bool) {
	i, k := e.num.single()
	return i, k == 1 && e.den.isConstant()
}

// Ratio returns the scores over whose means the estimate is mean(num) / mean(den).
func (e *Estimate) Ratio() (num, den int, ok bool) {
	i, k := e.num.single()
	j, l := e.den.single()
	return i, j, k != 0 && k == l
}

// Linear returns the estimate as a linear combination of means, if it is one.
func (e *Estimate) Linear() (Combination, bool) {
	return e.num, e.num.Coef != nil && e.den.isConstant()
}

// Fraction returns the estimate as num / den, two linear combinations, if it is
// that, as any ratio with factors and added constants; a linear one has the
// constant 1 as den. Under theta = theta0, num - theta0 den has the value 0.
func (e *Estimate) Fraction() (num, den Combination, ok bool) {
	return e.num, e.den, e.num.Coef != nil
}

// single returns the mean that the combination is a multiple of; k is 0 if it is
// nothing of the kind.
func (c Combination) single() (i int, k float64) {
	for j, v := range c.Coef {
		if v != 0 && k != 0 {
			return 0, 0
		}
		if v != 0 {
			i, k = j, v
		}
	}
	if c.Const != 0 {
		return 0, 0
	}
	return i, k
}

func (c Combination) isConstant() bool {
	return c.Coef != nil && !slices.ContainsFunc(c.Coef, func(k float64) bool { return k != 0 })
}

// isMultipleOf says whether c = k d for some constant k.
func (c Combination) isMultipleOf(d Combination) bool {
	if c.Coef == nil || d.Coef == nil {
		return false
	}
	x, y := append([]float64{c.Const}, c.Coef...), append([]float64{d.Const}, d.Coef...)
	p := slices.IndexFunc(y, func(k float64) bool { return k != 0 })
	for i := range x {
		if p < 0 || x[i]*y[p] != x[p]*y[i] {
			return false
		}
	}
	return true
}

// combine is a c + b d.
func combine(a float64, c Combination, b float64, d Combination) Combination {
	r := Combination{Const: a*c.Const + b*d.Const, Coef: make([]float64, len(c.Coef))}
	for i := range r.Coef {
		r.Coef[i] = a*c.Coef[i] + b*d.Coef[i]
	}
	return r
}

func (c Combination) scaled(k float64) Combination { return combine(k, c, 0, c) }

// fractionOf writes a node over k means as a fraction of linear combinations;
// both are none if it is no such fraction. A constant denominator is 1.
func fractionOf(n *node, k int) (num, den Combination) {
	one := Combination{Const: 1, Coef: make([]float64, k)}
	switch n.op {
	case opNum:
		return one.scaled(n.num), one
	case opMean:
		num = Combination{Coef: make([]float64, k)}
		num.Coef[n.slot] = 1
		return num, one
	case opNeg:
		if num, den = fractionOf(n.args[0], k); num.Coef != nil {
			return num.scaled(-1), den
		}
	case opAdd, opSub, opMul, opDiv:
		p, q := fractionOf(n.args[0], k)
		r, s := fractionOf(n.args[1], k)
		if p.Coef == nil || r.Coef == nil {
			break
		}
		switch n.op {
		case opAdd:
			return sumOf(p, q, 1, r, s)
		case opSub:
			return sumOf(p, q, -1, r, s)
		case opMul:
			return productOf(p, q, r, s)
		}
		return productOf(p, q, s, r)
	}
	return Combination{}, Combination{}
}

// sumOf is p/q + sign r/s.
func sumOf(p, q Combination, sign float64, r, s Combination) (num, den Combination) {
	switch {
	case slices.Equal(q.Coef, s.Coef) && q.Const == s.Const:
		return combine(1, p, sign, r), q
	case r.isConstant() && s.isConstant():
		return combine(1, p, sign*r.Const/s.Const, q), q
	case p.isConstant() && q.isConstant():
		return combine(p.Const/q.Const, s, sign, r), s
	}
	return Combination{}, Combination{}
}

// productOf is (p r) / (q s), as far as one factor above and one below is constant.
func productOf(p, q, r, s Combination) (num, den Combination) {
	switch {
	case p.isConstant():
		num = r.scaled(p.Const)
	case r.isConstant():
		num = p.scaled(r.Const)
	default:
		return Combination{}, Combination{}
	}
	switch {
	case q.isConstant():
		den = s.scaled(q.Const)
	case s.isConstant():
		den = q.scaled(s.Const)
	default:
		return Combination{}, Combination{}
	}
	if den.isConstant() {
		if den.Const == 0 {
			return Combination{}, Combination{}
		}
		return num.scaled(1 / den.Const), den.scaled(1 / den.Const)
	}
	return num, den
}
