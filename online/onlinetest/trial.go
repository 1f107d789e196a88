package onlinetest

import (
	"fmt"
	"strings"
	"time"

	"stillwell/online"
	"stillwell/online/expr"
)

// Slots of the fields of a Trial's events.
const (
	slotUnit = iota
	slotArm
	slotSegment
	slotScores
)

// A Trial describes a plan of one study whose events carry everything in fields of their
// own: unit, arm, segment, and a number for each score, which is summed over the unit's events.
type Trial struct {
	Units   online.Units // who has a Baseline has arms, and who has a name in ByNames has a segment; the rest is filled in
	Scores  []string     // one that ends in ? is 0 or 1: whether the number was ever above 0
	Of      []Of
	Watches []online.Watch // Estimate is an index in Of
	Every   time.Duration  // of steps; an hour if it is zero
	Level   float64        // 0.95 if it is zero
}

// Of is an estimate in the words of a study file.
type Of struct {
	Name     string // its formula, if it is ""
	Formula  string // mean(fare) / mean(visits)
	Contrast online.Contrast
	Adjust   []string // scores, as the entry event has them
	TuneFor  float64
	Start    time.Duration
}

// Plan compiles the trial. Keyed units count for a minute and enter once. Panics on
// what no plan can be.
func (t Trial) Plan() *online.Plan {
	p := &online.Plan{Fields: &expr.Fields{}, Every: t.Every, Level: t.Level}
	if p.Every == 0 {
		p.Every = time.Hour
	}
	if p.Level == 0 {
		p.Level = 0.95
	}
	for _, field := range []string{slotUnit: "unit", slotArm: "arm", slotSegment: "segment"} {
		p.Fields.Slot(field)
	}
	s := online.Study{Name: "crossing", Units: t.Units, Watches: t.Watches}
	placeUnits(&s.Units)
	tallies := make([]expr.Tally, len(t.Scores))
	for i, name := range t.Scores {
		name, binary := strings.CutSuffix(name, "?")
		p.Fields.Slot(name)
		tallies[i] = expr.Tally{Name: name, Binary: binary, NonNegative: binary}
		tally := online.Tally{Name: name, Kind: online.SumOf}
		if binary {
			tally.Kind = online.Any
			tally.When = must(expr.ParseFilter(name+" > 0", p.Fields))
		} else {
			tally.Value = must(expr.ParseValue(name, p.Fields))
		}
		s.Tallies = append(s.Tallies, tally)
	}
	for _, of := range t.Of {
		e := online.Estimate{Name: of.Name, Source: of.Formula, Of: must(expr.ParseEstimate(of.Formula, tallies)),
			Contrast: of.Contrast, TuneFor: of.TuneFor, Start: of.Start}
		if e.Name == "" {
			e.Name = of.Formula
		}
		for _, name := range of.Adjust {
			e.Adjust = append(e.Adjust, online.Covariate{Name: name, Tally: -1, Field: p.Fields.Slot(name)})
		}
		s.Estimates = append(s.Estimates, e)
	}
	p.Studies = []online.Study{s}
	if err := p.Compile(); err != nil {
		panic(fmt.Sprintf("onlinetest: %v", err))
	}
	return p
}

func placeUnits(u *online.Units) {
	u.Arm, u.From, u.Until = -1, online.NoTime, online.NoTime
	if u.Kind != online.Keyed {
		return
	}
	u.Key, u.Never, u.FollowUp = slotUnit, true, time.Minute
	if u.Baseline != "" {
		u.Arm = slotArm
	}
	if len(u.ByNames) > 0 {
		u.By = []int{slotSegment}
	}
}

func must[T any](x T, err error) T {
	if err != nil {
		panic(fmt.Sprintf("onlinetest: %v", err))
	}
	return x
}
