package online

import (
	"stillwell/online/expr"
	"stillwell/online/influence"
)

// overPresent writes an estimate over score means as a functional of component means:
// the mean of a score that can be absent is its sum over its presence.
func overPresent(e *expr.Estimate, places []scoreAt) (influence.Estimate, []int) {
	inputs := make([]int, 0, 2*len(places))
	value := make([]int, len(places))
	present := make([]int, len(places))
	absent := false
	for i, at := range places {
		value[i], present[i] = len(inputs), -1
		inputs = append(inputs, at.value)
		if at.present >= 0 {
			absent = true
			present[i] = len(inputs)
			inputs = append(inputs, at.present)
		}
	}
	out := influence.Estimate{Of: &e.Functional, Shape: shapeOf(e)}
	for _, d := range e.Denominators() {
		out.Divisors = append(out.Divisors, wrapPresent(d, value, present, len(inputs), absent))
	}
	if !absent {
		out.Binary = out.Shape.Kind == influence.Mean && places[out.Shape.Num].score.Binary()
		return out, inputs
	}
	out.Of = wrapPresent(&e.Functional, value, present, len(inputs), true)
	for _, p := range present {
		if p >= 0 {
			out.Divisors = append(out.Divisors, pick{p})
		}
	}
	if out.Shape.Kind == influence.Mean {
		out.Shape = influence.Shape{Kind: influence.Ratio, Num: value[out.Shape.Num], Den: present[out.Shape.Num]}
	} else {
		out.Shape = influence.Shape{Kind: influence.Smooth}
	}
	return out, inputs
}

func shapeOf(e *expr.Estimate) influence.Shape {
	if i, ok := e.Mean(); ok {
		return influence.Shape{Kind: influence.Mean, Num: i}
	}
	if i, j, ok := e.Ratio(); ok {
		return influence.Shape{Kind: influence.Ratio, Num: i, Den: j}
	}
	if e.Shape() == expr.Linear {
		return influence.Shape{Kind: influence.Linear}
	}
	return influence.Shape{Kind: influence.Smooth}
}

func wrapPresent(f influence.Functional, value, present []int, width int, absent bool) influence.Functional {
	if !absent {
		return f
	}
	return meansOverPresent{f, value, present, width}
}

type meansOverPresent struct {
	f              influence.Functional
	value, present []int
	width          int
}

func (g meansOverPresent) means(v []float64) []float64 {
	m := make([]float64, len(g.value))
	for i := range m {
		m[i] = v[g.value[i]]
		if p := g.present[i]; p >= 0 {
			m[i] /= v[p]
		}
	}
	return m
}

func (g meansOverPresent) Eval(v []float64) float64 { return g.f.Eval(g.means(v)) }

func (g meansOverPresent) Gradient(v, dst []float64) float64 {
	m := g.means(v)
	inner := make([]float64, len(m))
	theta := g.f.Gradient(m, inner)
	clear(dst)
	for i, d := range inner {
		if p := g.present[i]; p >= 0 {
			dst[g.value[i]] += d / v[p]
			dst[p] -= d * m[i] / v[p]
		} else {
			dst[g.value[i]] += d
		}
	}
	return theta
}

// pick is the functional that is one component.
type pick struct{ at int }

func (p pick) Eval(v []float64) float64 { return v[p.at] }

func (p pick) Gradient(v, dst []float64) float64 {
	clear(dst)
	dst[p.at] = 1
	return v[p.at]
}
