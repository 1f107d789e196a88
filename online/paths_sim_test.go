package online_test

import (
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"runtime"
	"strconv"
	"sync"
	"testing"
	"time"

	"stillwell/online"
	"stillwell/online/boundary"
	"stillwell/online/onlinetest"
)

// Simulations of what readings and alarms promise, through shards and desk. Each test runs
// a few hundred paths; STILLWELL_LONG=1 runs thousands, and longer ones, and prints a
// table. Whatever a rule is there for stands beside it in the same test: the same numbers
// without the rule, which must err visibly, so that no test passes for want of power.
// Seeds are fixed: a path depends on its test's seed and its own number alone.
//
// Rates are of paths that erred at any look. Looks are so many that more would add
// little, but they are not after every unit: rates lie a little below those that are.

var long = os.Getenv("STILLWELL_LONG") == "1"

// size is the short or the long number of paths or units; with -short, which the race
// detector goes with, an eighth of the paths.
func size(short, full int) int {
	if long {
		return full
	}
	return short
}

func paths(short, full int) int {
	if n := size(short, full); !testing.Short() {
		return n
	} else {
		return max(8, n/8)
	}
}

// eachPath runs paths on all cores. walk follows one, and returns what tells of it; tell
// is never called twice at a time.
func eachPath[T any](paths int, seed uint64, walk func(rng *rand.Rand) T, tell func(T)) {
	var lock sync.Mutex
	var wg sync.WaitGroup
	workers := runtime.GOMAXPROCS(0)
	for w := range workers {
		wg.Go(func() {
			for i := w; i < paths; i += workers {
				x := walk(rand.New(rand.NewPCG(seed, uint64(i))))
				lock.Lock()
				tell(x)
				lock.Unlock()
			}
		})
	}
	wg.Wait()
}

// A rate is a share of paths.
type rate struct{ hits, paths int }

func (r *rate) count(hit bool) {
	r.paths++
	if hit {
		r.hits++
	}
}

func (r rate) value() float64 { return float64(r.hits) / float64(r.paths) }

// se is the Monte Carlo standard error if the true rate were p.
func (r rate) se(p float64) float64 { return math.Sqrt(p * (1 - p) / float64(r.paths)) }

func tell(t *testing.T, what string, got rate, want string, args ...any) {
	t.Helper()
	line := fmt.Sprintf("%-62s %.4f of %5d  %s", what, got.value(), got.paths, fmt.Sprintf(want, args...))
	if long {
		fmt.Println(line)
	} else {
		t.Log(line)
	}
}

// requireWithin fails where a rate exceeds the nominal one by more than three standard errors.
func requireWithin(t *testing.T, what string, got rate, nominal float64) {
	t.Helper()
	tell(t, what, got, "at most %.4g", nominal)
	if got.value() > nominal+3*got.se(nominal) {
		t.Errorf("%s: %.4f of %d paths, want at most %.4g", what, got.value(), got.paths, nominal)
	}
}

// requireBeyond fails where a rate does not exceed the nominal one by three standard
// errors: the rule under test would not be needed, or its test could not tell.
func requireBeyond(t *testing.T, what string, got rate, nominal float64) {
	t.Helper()
	tell(t, what, got, "beyond %.4g", nominal)
	if got.value() <= nominal+3*got.se(nominal) && !testing.Short() {
		t.Errorf("%s: %.4f of %d paths, expected well beyond %.4g", what, got.value(), got.paths, nominal)
	}
}

// requireMost fails where what should come to pass on most paths falls short of that by three
// standard errors: the error rates of the others would be those of silence.
func requireMost(t *testing.T, what string, got rate, least float64) {
	t.Helper()
	tell(t, what, got, "at least %.4g", least)
	if got.value() < least-3*got.se(least) {
		t.Errorf("%s: %.4f of %d paths, expected at least %.4g", what, got.value(), got.paths, least)
	}
}

// growth is how much more units each look has than the one before.
func growth() float64 {
	if long {
		return 1. / 24
	}
	return 1. / 10
}

// looks are totals of units at which steps end: first, then more by a share each time.
func looks(first, horizon int, growth float64) []int {
	var at []int
	for n := float64(first); n < float64(horizon); n = math.Ceil(n * (1 + growth)) {
		at = append(at, int(n))
	}
	return append(at, horizon)
}

func outside(in [2]float64, truth float64) bool { return truth < in[0] || truth > in[1] }

// A course is a trial with the law of its data.
type course struct {
	trial  onlinetest.Trial
	arms   []string
	shares []float64                                  // chances of the arms, however they are planned
	assign func(rng *rand.Rand, unit int) int         // where shares are not enough
	draw   func(rng *rand.Rand, arm int, z []float64) // a unit's scores
	seen   func(spot any, arm int, z []float64)       // what a path keeps of a unit for itself, if anything
	spot   func() any                                 // and where
	looks  []int
	seed   uint64
}

func (c *course) arm(rng *rand.Rand, unit int) int {
	if c.assign != nil {
		return c.assign(rng, unit)
	}
	arm := 0
	for u := rng.Float64(); arm < len(c.shares)-1 && u >= c.shares[arm]; arm++ {
		u -= c.shares[arm]
	}
	return arm
}

// walk takes one path, and shows each step's output to see.
func (c *course) walk(rng *rand.Rand, plan *online.Plan, spot any, see func(units int, out online.Output)) {
	d := onlinetest.New(plan)
	z := make([]float64, len(c.trial.Scores))
	n := 0
	for step, upTo := range c.looks {
		at := int64(step) * int64(time.Hour)
		for ; n < upTo; n++ {
			arm := c.arm(rng, n)
			c.draw(rng, arm, z)
			if c.seen != nil {
				c.seen(spot, arm, z)
			}
			at += int64(time.Microsecond)
			d.Unit(at, c.arms[arm], "", z...)
		}
		see(n, d.Step(int64(step+1)*int64(time.Hour)))
	}
}

// missed is what became of the intervals of one estimate on one path.
type missed struct {
	spoke   bool // there was an anytime interval
	anytime bool // one missed the truth
	fixed   bool // an interval for one look did, at some look
	ungated bool // so did an anytime interval without a gate, from the first look on
}

type missedRates struct{ spoke, anytime, fixed, ungated rate }

// followIntervals counts, by estimate, how often intervals miss the truth in any arm.
func (c *course) followIntervals(paths int, truth []float64) []missedRates {
	for i := range c.trial.Of {
		c.trial.Of[i].Name = strconv.Itoa(i)
	}
	plan := c.trial.Plan()
	all := make([]missedRates, len(truth))
	eachPath(paths, c.seed, func(rng *rand.Rand) []missed {
		out := make([]missed, len(truth))
		open := map[string]*boundary.Sequence{}
		c.walk(rng, plan, nil, func(units int, step online.Output) {
			for i := range step.Latest {
				r := &step.Latest[i]
				k, _ := strconv.Atoi(r.Estimate)
				m := &out[k]
				if r.Interval != nil {
					m.fixed = m.fixed || outside(*r.Interval, truth[k])
				}
				if r.Anytime != nil {
					m.spoke = true
					m.anytime = m.anytime || outside(*r.Anytime, truth[k])
				}
				if r.StdError != nil {
					m.ungated = m.ungated || ungated(open, r, units, truth[k], plan)
				}
			}
		})
		return out
	}, func(path []missed) {
		for k, m := range path {
			all[k].spoke.count(m.spoke)
			all[k].anytime.count(m.anytime)
			all[k].fixed.count(m.fixed)
			all[k].ungated.count(m.ungated)
		}
	})
	return all
}

// ungated takes a sequence that nothing holds back a step on.
func ungated(open map[string]*boundary.Sequence, r *online.Reading, units int, truth float64, plan *online.Plan) bool {
	key := r.Estimate + r.Arm
	s, ok := open[key]
	if !ok {
		s = delayedStart(1 - plan.Level)
		open[key] = s
	}
	return s.Step(boundary.Look{Units: float64(units), StdError: *r.StdError, Z: (*r.Value - truth) / *r.StdError, Started: true}).Crossed
}

func delayedStart(err float64) *boundary.Sequence {
	s, e := boundary.NewSequence(boundary.Config{Error: err, Method: boundary.Delayed})
	if e != nil {
		panic(e)
	}
	return &s
}
