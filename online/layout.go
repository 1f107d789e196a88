package online

import (
	"fmt"
	"math"
	"slices"

	"stillwell/online/expr"
	"stillwell/online/influence"
	"stillwell/online/moment"
)

// layout is where a study's quantities stand in the vectors that are summed. A unit's
// vector holds, for each distinct score, its value (0 where absent) and, if it can be
// absent, whether it is present; then its covariates likewise. A mean over present
// scores is so a ratio of two means, and needs no code of its own.
type layout struct {
	tallies     int // values of a row: tallies, then fields of the entry event
	entryFields []int
	before      []int // tallies over the past
	scores      []scoreAt
	covariates  []covariateAt
	width       int           // components of a unit's vector
	shape       *moment.Shape // of complete units
	provisional *moment.Shape // of all units: no third moments
	estimates   []estimateLayout
}

// scoreAt is a score's place; present is -1 where it is never absent.
type scoreAt struct {
	score          *expr.Score
	value, present int
}

type covariateAt struct {
	from           int // index among a row's values
	value, present int
}

// estimateLayout is an estimate in terms of components.
type estimateLayout struct {
	inputs     []int // components whose means the functional takes, in order
	covariates []int // components that adjust it
	of         influence.Estimate
	presence   []int // components counting presence, of scores that can be absent
	triples    bool  // third moments are kept: it has an anytime interval
}

func newLayout(s *Study) (*layout, error) {
	l := &layout{}
	if len(s.Tallies) > math.MaxUint8 {
		return nil, fmt.Errorf("study %s: %d tallies, at most %d", s.Name, len(s.Tallies), math.MaxUint8)
	}
	for i := range s.Tallies {
		if s.Tallies[i].Before > 0 {
			l.before = append(l.before, i)
		}
	}
	for i := range s.Estimates {
		for _, c := range s.Estimates[i].Adjust {
			if c.Tally < 0 && !slices.Contains(l.entryFields, c.Field) {
				l.entryFields = append(l.entryFields, c.Field)
			}
		}
	}
	l.tallies = len(s.Tallies) + len(l.entryFields)
	for i := range s.Estimates {
		l.estimates = append(l.estimates, l.place(s, &s.Estimates[i]))
	}
	var err error
	if l.shape, err = moment.NewShape(l.width, l.pairs(), l.triples()); err == nil {
		l.provisional, err = moment.NewShape(l.width, l.pairs(), nil)
	}
	if err != nil {
		return nil, fmt.Errorf("study %s: %w", s.Name, err)
	}
	return l, nil
}

// place gives an estimate's scores and covariates their components.
func (l *layout) place(s *Study, e *Estimate) estimateLayout {
	el := estimateLayout{triples: e.Contrast != NoContrast}
	places := make([]scoreAt, 0, len(e.Of.Scores()))
	for _, sc := range e.Of.Scores() {
		k := slices.IndexFunc(l.scores, func(at scoreAt) bool { return at.score.String() == sc.String() })
		if k < 0 {
			at := scoreAt{score: sc, value: l.width, present: -1}
			l.width++
			if sc.MayBeAbsent() {
				at.present = l.width
				l.width++
			}
			k = len(l.scores)
			l.scores = append(l.scores, at)
		}
		at := l.scores[k]
		places = append(places, at)
		if at.present >= 0 {
			el.presence = append(el.presence, at.present)
		}
	}
	el.of, el.inputs = overPresent(e.Of, places)
	for _, c := range e.Adjust {
		from := c.Tally
		if from < 0 {
			from = len(s.Tallies) + slices.Index(l.entryFields, c.Field)
		}
		k := slices.IndexFunc(l.covariates, func(at covariateAt) bool { return at.from == from })
		if k < 0 {
			at := covariateAt{from: from, value: l.width, present: -1}
			l.width++
			if c.Tally < 0 || startsAbsent(s.Tallies[c.Tally].Kind) {
				at.present = l.width
				l.width++
			}
			k = len(l.covariates)
			l.covariates = append(l.covariates, at)
		}
		el.covariates = append(el.covariates, l.covariates[k].value)
		if p := l.covariates[k].present; p >= 0 {
			// A covariate that a unit lacks is 0 beside an indicator of its own: both are
			// settled before entry, so adjusting for them is sound.
			el.covariates = append(el.covariates, p)
		}
	}
	return el
}

func startsAbsent(k TallyKind) bool { return k == Min || k == Max || k == First || k == Last }

// pairs are the co-moments that any estimate needs: among its inputs and covariates.
func (l *layout) pairs() [][2]int {
	var out [][2]int
	for _, e := range l.estimates {
		all := slices.Concat(e.inputs, e.covariates)
		for i, a := range all {
			for _, b := range all[i:] {
				p := [2]int{min(a, b), max(a, b)}
				if !slices.Contains(out, p) {
					out = append(out, p)
				}
			}
		}
	}
	return out
}

func (l *layout) triples() [][3]int {
	var out [][3]int
	for _, e := range l.estimates {
		if !e.triples {
			continue
		}
		all := slices.Concat(e.inputs, e.covariates)
		slices.Sort(all)
		all = slices.Compact(all)
		for i, a := range all {
			for j, b := range all[i:] {
				for _, c := range all[i+j:] {
					t := [3]int{a, b, c}
					if !slices.Contains(out, t) {
						out = append(out, t)
					}
				}
			}
		}
	}
	return out
}

// vector fills z with the unit's components from a row's values.
func (l *layout) vector(values, z []float64) {
	for i := range l.scores {
		at := &l.scores[i]
		v, ok := at.score.Eval(values)
		z[at.value] = 0
		if ok {
			z[at.value] = v
		}
		if at.present >= 0 {
			z[at.present] = 0
			if ok {
				z[at.present] = 1
			}
		}
	}
	for i := range l.covariates {
		at := &l.covariates[i]
		x := values[at.from]
		absent := math.IsNaN(x)
		z[at.value] = 0
		if !absent {
			z[at.value] = x
		}
		if at.present >= 0 {
			z[at.present] = 0
			if !absent {
				z[at.present] = 1
			}
		}
	}
}
