package oracle_test

import (
	"fmt"
	"slices"
	"time"

	"pgregory.net/rapid"

	. "stillwell/cmd/stillwell/internal/oracle"
)

var (
	assign = And(Is("type", "assign"), Is("trial", "seat-map"))
	visit  = Is("type", "visit")
	ticket = Is("type", "ticket")
	pay    = Is("type", "pay")
	dear   = And(ticket, Above("amount", 10))
	slow   = And(pay, Above("ms", 800))
	vip    = Flag("vip")
	noVIP  = Not(vip)
	other  = Unlike("type", "visit")
	cheap  = Not(Above("amount", 10))
	exact  = Equals("ms", 900)
)

// within are the tallies that count after entry, past those before it.
var within = []Tally{
	{Name: "visits", Kind: Count, When: &visit},
	{Name: "fare", Kind: Sum, Value: Field("amount"), When: &ticket},
	{Name: "bought", Kind: Any, When: &ticket},
	{Name: "slowest", Kind: Max, Value: Field("ms"), When: &pay},
	{Name: "quickest", Kind: Min, Value: Field("ms")},
	{Name: "opening", Kind: First, Value: Field("amount"), When: &ticket},
	{Name: "closing", Kind: Last, Value: Field("amount"), When: &other},
	{Name: "doubled", Kind: Sum, Value: Times("amount", 2)},
	{Name: "both", Kind: Max, Value: Plus("amount", "ms"), When: &dear},
	{Name: "filled", Kind: Last, Value: Else("ms", 5), When: &pay},
	{Name: "slow", Kind: Count, When: &slow},
	{Name: "vips", Kind: Count, When: &vip},
	{Name: "common", Kind: Any, When: &noVIP},
	{Name: "cheap", Kind: Count, When: &cheap},
	{Name: "exact", Kind: Any, When: &exact},
}

var past = []Tally{
	{Name: "past_fare", Kind: Sum, Value: Field("amount"), When: &ticket},
	{Name: "past_visits", Kind: Count, When: &visit},
	{Name: "past_any", Kind: Any, When: &pay},
	{Name: "past_max", Kind: Max, Value: Field("ms"), When: &pay},
	{Name: "past_min", Kind: Min, Value: Field("amount")},
	{Name: "past_first", Kind: First, Value: Field("ms"), When: &pay},
	{Name: "past_last", Kind: Last, Value: Field("amount"), When: &ticket},
}

func file(t *rapid.T) *File {
	f := &File{Stream: Stream{Time: "ts"}, Level: one(t, "level", 0.95, 0.9), Every: one(t, "step", time.Hour, 10*time.Minute, 30*time.Minute)}
	f.Stream.Lateness = one(t, "lateness", 0, grid, 2*grid, 6*grid)
	if chance(t, "ids", 2) {
		f.Stream.ID = "id"
		if chance(t, "remember", 3) {
			f.Stream.Remember = f.Stream.Lateness + one(t, "longer", grid, time.Hour)
		}
	}
	if chance(t, "few segments", 3) {
		f.Segments = rapid.IntRange(1, 2).Draw(t, "segments")
	}
	for i := range one(t, "studies", 1, 1, 1, 2, 3) {
		f.Studies = append(f.Studies, study(t, fmt.Sprint("study-", i)))
	}
	return f
}

func study(t *rapid.T, name string) Study {
	s := Study{Name: name}
	switch one(t, "units", "key", "key", "key", "every", "events") {
	case "every":
		s.Bucket = one(t, "every", grid, 15*time.Minute, time.Hour)
		if chance(t, "from", 3) {
			s.From = epoch.Add(time.Duration(rapid.IntRange(0, 8).Draw(t, "from hour")) * time.Hour)
		}
		s.Tallies = choose(t, within, false)
	case "events":
		s.Events = true
		if chance(t, "entry", 2) {
			s.Entry = one(t, "of", &pay, &ticket, &vip)
		}
		s.By = segments(t)
		s.Tallies = choose(t, within, false)
	default:
		keyed(t, &s)
	}
	estimates(t, &s)
	return s
}

func segments(t *rapid.T) []string {
	return one(t, "by", nil, []string{"platform"}, []string{"platform", "vip"})
}

func keyed(t *rapid.T, s *Study) {
	s.Key = "passenger"
	if !chance(t, "enters with the first event", 5) {
		s.Entry = &assign
	}
	if !chance(t, "one arm", 4) {
		s.Arm, s.Baseline = "arm", "current"
		s.Arms = one(t, "arms", []string{"current", "wide"}, []string{"current", "wide", "tall"})
		s.Leave = chance(t, "leave", 3)
	}
	s.By = segments(t)
	if !chance(t, "no follow-up", 6) {
		s.FollowUp = one(t, "follow-up", 30*time.Minute, time.Hour, 2*time.Hour)
		switch one(t, "enter anew", "default", "never", "soon") {
		case "never":
			s.Never = true
		case "soon":
			s.Again = one(t, "again", grid, time.Hour)
		}
	}
	if chance(t, "from", 5) {
		s.From = epoch.Add(time.Duration(rapid.IntRange(0, 24).Draw(t, "from")) * grid)
	}
	if chance(t, "until", 5) {
		s.Until = epoch.Add(time.Duration(rapid.IntRange(30, 90).Draw(t, "until")) * grid)
	}
	s.Tallies = choose(t, within, false)
	if s.Entry != nil && chance(t, "past", 2) {
		s.Tallies = append(s.Tallies, choose(t, past, true)...)
		if s.Again > 0 && open["a past that reaches into an earlier follow-up"] {
			s.Again = 2 * time.Hour
		}
	}
}

// choose draws some tallies of a list.
func choose(t *rapid.T, of []Tally, before bool) []Tally {
	kept := []Tally{of[rapid.IntRange(0, len(of)-1).Draw(t, "tally")]}
	for _, tl := range of {
		if tl.Name != kept[0].Name && chance(t, tl.Name, 4) {
			kept = append(kept, tl)
		}
	}
	for i := range kept {
		if before {
			kept[i].Before = one(t, "before", grid, time.Hour, 90*time.Minute)
			if chance(t, "grain", 3) {
				kept[i].Grain = one(t, "of", grid, 4*time.Minute)
			}
		}
	}
	return kept
}

// absent says which tallies a unit may lack.
func absent(tl Tally) bool { return tl.Kind != Count && tl.Kind != Sum && tl.Kind != Any }

func estimates(t *rapid.T, s *Study) {
	score := func() (Score, bool) {
		tl := one(t, "of tally", s.Tallies...)
		z, may := T(tl.Name), absent(tl)
		switch one(t, "score", "plain", "capped", "zero", "sum", "above") {
		case "capped":
			z = Capped(z, 11)
		case "zero":
			z, may = Or0(z), false
		case "sum":
			b := one(t, "and", s.Tallies...)
			may = may || absent(b)
			z = Added(T(min(tl.Name, b.Name)), T(max(tl.Name, b.Name))) // so that equal ones have equal texts
		case "above":
			z = Exceeds(z, 5)
		}
		return z, may
	}
	for i := range one(t, "estimates", 1, 2, 3) {
		e := Estimate{Name: fmt.Sprint("e", i)}
		a, mayA := score()
		mayB := false
		switch one(t, "formula", "mean", "ratio", "less", "log") {
		case "mean":
			e.Of = Mean(a)
		case "ratio":
			var b Score
			b, mayB = score()
			if b.Text == a.Text {
				b, mayB = Or0(T(s.Tallies[0].Name)), false
			}
			if b.Text == a.Text {
				b, mayB = Exceeds(T(s.Tallies[0].Name), 5), absent(s.Tallies[0])
			}
			e.Of = Ratio(a, b)
		case "less":
			var b Score
			if b, mayB = score(); b.Text == a.Text {
				b, mayB = Exceeds(T(s.Tallies[0].Name), 2), absent(s.Tallies[0])
			}
			e.Of = Less(a, 2, b)
		case "log":
			e.Of = Log(a)
		}
		if s.Arm != "" && !chance(t, "no contrast", 3) {
			e.Contrast = one(t, "contrast", "difference", "relative")
			e.Present = mayA || mayB
			for _, tl := range s.Tallies {
				if tl.Before > 0 && chance(t, "adjust", 2) {
					e.Adjust = append(e.Adjust, Covariate{Tally: tl.Name})
				}
			}
			e.Adjust = slices.Clip(e.Adjust)
		}
		s.Estimates = append(s.Estimates, e)
	}
}
