package online

import (
	"time"

	"stillwell/online/expr"
)

// A Plan is a whole checked study file as far as numbers go: what every shard,
// desk and decoder of a run shares. Read-only.
type Plan struct {
	Fields  *expr.Fields  // the event fields that anything names
	Studies []Study       // in file order
	Every   time.Duration // length of a step
	Level   float64       // of intervals, for example 0.95
	Limits  Limits
}

// Limits bound memory.
type Limits struct {
	Units    int // open units a study, and those that wait to enter, from which on not all are admitted; see door
	Rows     int // units kept with their tallies, open and complete, a study; the oldest complete ones go
	Segments int // segments a study; later ones are pooled
}

// Compile prepares the plan for use: it places every score and covariate in the
// vectors that are summed. To be called once, before anything is made from the plan.
func (p *Plan) Compile() error {
	for i := range p.Studies {
		s := &p.Studies[i]
		l, err := newLayout(s)
		if err != nil {
			return err
		}
		s.keyed, s.layout = newKeyed(s.Name), l
	}
	return nil
}
