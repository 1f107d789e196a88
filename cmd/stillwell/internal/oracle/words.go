package oracle

import (
	"encoding/json"
	"fmt"
	"math"
	"slices"
	"strings"
)

// Fields are an event's fields as encoding/json gives them, numbers as json.Number. A field
// that is null is the same as one that is missing.
type Fields map[string]any

func (f Fields) lacks(name string) bool { return f[name] == nil }

// number is the field as a number; it says no for other types.
func (f Fields) number(name string) (float64, bool) {
	n, ok := f[name].(json.Number)
	if !ok {
		return 0, false
	}
	v, _ := n.Float64() // infinite where out of range
	return v, true
}

// A Cond is a condition on one event.
type Cond struct {
	Text  string // in the grammar of the file
	Names []string
	True  func(Fields) bool // asked only of events that have all that is named
}

// Holds is false where the event lacks a field that the condition names.
func (c *Cond) Holds(f Fields) bool {
	return !slices.ContainsFunc(c.Names, f.lacks) && c.True(f)
}

// Is is field == "text"; a field of another type is not.
func Is(field, text string) Cond {
	return Cond{fmt.Sprintf("%s == %q", field, text), []string{field}, func(f Fields) bool { return f[field] == any(text) }}
}

// Unlike is field != "text"; a field of another type is not even that.
func Unlike(field, text string) Cond {
	return Cond{fmt.Sprintf("%s != %q", field, text), []string{field}, func(f Fields) bool {
		s, ok := f[field].(string)
		return ok && s != text
	}}
}

// Above is field > x.
func Above(field string, x float64) Cond {
	return Cond{fmt.Sprintf("%s > %v", field, x), []string{field}, func(f Fields) bool {
		v, ok := f.number(field)
		return ok && v > x
	}}
}

// Equals is field == x, of a number.
func Equals(field string, x float64) Cond {
	return Cond{fmt.Sprintf("%s == %v", field, x), []string{field}, func(f Fields) bool {
		v, ok := f.number(field)
		return ok && v == x
	}}
}

// Flag is a bool field that stands alone.
func Flag(field string) Cond {
	return Cond{field, []string{field}, func(f Fields) bool { return f[field] == any(true) }}
}

// Not is !(c).
func Not(c Cond) Cond {
	return Cond{"!(" + c.Text + ")", c.Names, func(f Fields) bool { return !c.True(f) }}
}

// And is a && b.
func And(a, b Cond) Cond {
	return Cond{"(" + a.Text + ") && (" + b.Text + ")", slices.Concat(a.Names, b.Names), func(f Fields) bool { return a.True(f) && b.True(f) }}
}

// Or is a || b.
func Or(a, b Cond) Cond {
	return Cond{"(" + a.Text + ") || (" + b.Text + ")", slices.Concat(a.Names, b.Names), func(f Fields) bool { return a.True(f) || b.True(f) }}
}

// A Value is a number of one event.
type Value struct {
	Text  string
	Names []string
	Of    func(Fields) (v float64, ok bool) // no: of a wrong type
}

// of is the value at an event: absent where a field it names is lacking, a fault where the
// type is wrong or the number not finite.
func (v Value) of(f Fields) (x float64, absent, fault bool) {
	if slices.ContainsFunc(v.Names, f.lacks) {
		return 0, true, false
	}
	x, ok := v.Of(f)
	if !ok || math.IsNaN(x) || math.IsInf(x, 0) {
		return 0, false, true
	}
	return x, false, false
}

// Field is the number in a field.
func Field(name string) Value {
	return Value{name, []string{name}, func(f Fields) (float64, bool) { return f.number(name) }}
}

// Times is name * by.
func Times(name string, by float64) Value {
	return Value{fmt.Sprintf("%s * %v", name, by), []string{name}, func(f Fields) (float64, bool) {
		v, ok := f.number(name)
		return v * by, ok
	}}
}

// Plus is a + b.
func Plus(a, b string) Value {
	return Value{a + " + " + b, []string{a, b}, func(f Fields) (float64, bool) {
		x, ok := f.number(a)
		y, yes := f.number(b)
		return x + y, ok && yes
	}}
}

// Else is name ?? x.
func Else(name string, x float64) Value {
	return Value{fmt.Sprintf("%s ?? %v", name, x), nil, func(f Fields) (float64, bool) {
		if f.lacks(name) {
			return x, true
		}
		return f.number(name)
	}}
}

// A Score is a number of one unit, or absent.
type Score struct {
	Text string
	Of   func(Tallies) (v float64, ok bool)
}

// Tallies are a unit's; an absent one is not in the map.
type Tallies map[string]float64

// T is a tally itself.
func T(name string) Score {
	return Score{name, func(t Tallies) (float64, bool) { v, ok := t[name]; return v, ok }}
}

// Capped is min(s, x).
func Capped(s Score, x float64) Score {
	return Score{fmt.Sprintf("min(%s, %v)", s.Text, x), func(t Tallies) (float64, bool) {
		v, ok := s.Of(t)
		return math.Min(v, x), ok
	}}
}

// Or0 is s ?? 0.
func Or0(s Score) Score {
	return Score{"(" + s.Text + " ?? 0)", func(t Tallies) (float64, bool) {
		if v, ok := s.Of(t); ok {
			return v, true
		}
		return 0, true
	}}
}

// Added is a + b.
func Added(a, b Score) Score {
	return Score{a.Text + " + " + b.Text, func(t Tallies) (float64, bool) {
		x, ok := a.Of(t)
		y, yes := b.Of(t)
		return x + y, ok && yes
	}}
}

// Exceeds is s > x, 1 or 0.
func Exceeds(s Score, x float64) Score {
	return Score{fmt.Sprintf("%s > %v", s.Text, x), func(t Tallies) (float64, bool) {
		v, ok := s.Of(t)
		if v > x {
			return 1, ok
		}
		return 0, ok
	}}
}

// A Formula is a smooth functional of the means of scores.
type Formula struct {
	Text   string
	Scores []Score
	At     func(m []float64) float64
	Slopes func(m []float64) []float64 // its derivative by each mean
	Plain  bool                        // the mean of one score
}

// Mean is mean(s).
func Mean(s Score) Formula {
	return Formula{"mean(" + s.Text + ")", []Score{s},
		func(m []float64) float64 { return m[0] },
		func([]float64) []float64 { return []float64{1} }, true}
}

// Ratio is mean(a) / mean(b).
func Ratio(a, b Score) Formula {
	return Formula{"mean(" + a.Text + ") / mean(" + b.Text + ")", []Score{a, b},
		func(m []float64) float64 { return m[0] / m[1] },
		func(m []float64) []float64 { return []float64{1 / m[1], -m[0] / m[1] / m[1]} }, false}
}

// Less is mean(a) - x * mean(b).
func Less(a Score, x float64, b Score) Formula {
	return Formula{fmt.Sprintf("mean(%s) - %v * mean(%s)", a.Text, x, b.Text), []Score{a, b},
		func(m []float64) float64 { return m[0] - x*m[1] },
		func([]float64) []float64 { return []float64{1, -x} }, false}
}

// Log is log(mean(s)).
func Log(s Score) Formula {
	return Formula{"log(mean(" + s.Text + "))", []Score{s},
		func(m []float64) float64 { return math.Log(m[0]) },
		func(m []float64) []float64 { return []float64{1 / m[0]} }, false}
}

// keyText is a value as keys compare: JSON text, strings unquoted.
func keyText(v any) string {
	switch v := v.(type) {
	case string:
		return v
	case json.Number:
		return v.String()
	case bool:
		return fmt.Sprint(v)
	}
	var b strings.Builder
	_ = json.NewEncoder(&b).Encode(v)
	return strings.TrimSpace(b.String())
}
