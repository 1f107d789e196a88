package online_test

import (
	"math"
	"math/rand/v2"
	"strings"
	"testing"
	"time"

	"stillwell/online"
	"stillwell/online/onlinetest"
)

// Where arms get units as planned, the four checks together block at most one comparison
// in a thousand for nothing, at all looks together. Beside them stands the usual test of
// shares at .05, looked at all the time. Conflicts and late events befall 4% of the units of
// both arms. With checks at .05 in the program's place of .00025 short paths are blocked with .012.
// Long: 2,000 paths.
func TestAllocationChecksSeldomBlock(t *testing.T) {
	trial := twoArms(1, 1).trial
	trial.Scores = []string{"fare"}
	trial.Of = []onlinetest.Of{{Formula: "mean(fare)", Contrast: online.Difference}}
	plan := trial.Plan()
	steps := looks(50, size(2_000, 10_000), growth())
	var blocked, usual rate
	eachPath(paths(150, 2000), 61, func(rng *rand.Rand) (m [2]bool) {
		d := onlinetest.New(plan)
		n, wide := 0, 0
		for step, upTo := range steps {
			at := int64(step) * int64(time.Hour)
			for ; n < upTo; n++ {
				arm := rng.IntN(2)
				wide += arm
				names := [2]string{"current", "wide"}
				at += 1000
				unit := d.Unit(at, names[arm], "", rng.NormFloat64())
				if rng.Float64() < .04 {
					d.Event(at, unit, names[1-arm], "", 0)
				}
				if rng.Float64() < .04 {
					d.Late(at-1, unit, "", "", 1)
				}
			}
			out := d.Step(int64(step+1) * int64(time.Hour))
			m[0] = m[0] || len(out.Alarms) > 0
			m[1] = m[1] || math.Abs(2*float64(wide)-float64(n)) > 1.96*math.Sqrt(float64(n))
		}
		return m
	}, func(m [2]bool) {
		blocked.count(m[0])
		usual.count(m[1])
	})
	requireWithin(t, "allocation as planned: blocked", blocked, .001)
	requireBeyond(t, "allocation as planned: the usual test at .05, always", usual, .05)
}

// Where arms do not get units as planned, the comparison is blocked: intervals and p become
// null with the reason, what was raised is withdrawn, and nothing new is raised. The real
// effect here is .8 standard deviations, on one score from the start, and on another from the
// 10,000th unit on only; without planned shares, so without checks, both are raised on
// the same data. What goes wrong: 54% of units in one arm; 6% against 3% of units seen in
// the other arm too; as many with late events. All this is far beyond chance, so that it must
// befall every path.
func TestAllocationChecksBlock(t *testing.T) {
	const turn, horizon, each = 10_000, 16_000, 250
	for _, what := range []string{"units entered", "units seen in two arms", "units with late events"} {
		for _, planned := range []bool{true, false} {
			c := twoArms(1, 1)
			if !planned {
				c.trial.Units.Arms = nil
			}
			c.trial.Scores = []string{"soon", "later"}
			c.trial.Of = []onlinetest.Of{{Formula: "mean(soon)", Contrast: online.Difference}, {Formula: "mean(later)", Contrast: online.Difference}}
			c.trial.Watches = []online.Watch{{Name: "soon", Estimate: 0, Error: .01}, {Name: "later", Estimate: 1, Error: .01}}
			plan := c.trial.Plan()
			type path struct{ soon, withdrawn, later, blocked bool }
			var soon, withdrawn, later, blocked rate
			eachPath(paths(4, 20), 62, func(rng *rand.Rand) (p path) {
				d := onlinetest.New(plan)
				for step := range horizon / each {
					at := int64(step) * int64(time.Hour)
					for i := range each {
						arm, other := 0, 0.03
						if u := rng.Float64(); what == "units entered" && u < .54 || u < .5 {
							arm = 1
						}
						if arm == 1 {
							other = .06
						}
						late := 0.
						if step*each+i >= turn {
							late = .8
						}
						at += 1000
						unit := d.Unit(at, c.arms[arm], "", .8*float64(arm)+rng.NormFloat64(), late*float64(arm)+rng.NormFloat64())
						if what == "units seen in two arms" && rng.Float64() < other {
							d.Event(at, unit, c.arms[1-arm], "")
						}
						if what == "units with late events" && rng.Float64() < other {
							d.Late(at-1, unit, "", "", 1)
						}
					}
					out := d.Step(int64(step+1) * int64(time.Hour))
					for _, a := range out.Alarms {
						switch {
						case a.Watch == "allocation: "+what:
							p.blocked = true
							if step*each >= turn {
								t.Errorf("%s: blocked only after %d units, too late for what is to be seen", what, step*each)
							}
						case a.Watch == "allocation: units complete" && what == "units entered":
						case a.Watch == "soon":
							p.soon = p.soon || a.State == online.StateRaised
							p.withdrawn = p.withdrawn || a.State == online.StateWithdrawn
						case a.Watch == "later":
							p.later = true
						default:
							t.Errorf("%s: alarm %s: %s", what, a.Watch, a.Words)
						}
					}
					for _, r := range out.Latest {
						requireBlocked(t, &r, p.blocked)
					}
				}
				return p
			}, func(p path) {
				soon.count(p.soon)
				withdrawn.count(p.withdrawn)
				later.count(p.later)
				blocked.count(p.blocked)
			})
			all := func(r rate, want int) bool { return r.hits == want*r.paths }
			if planned && !(all(soon, 1) && all(withdrawn, 1) && all(later, 0) && all(blocked, 1)) {
				t.Errorf("%s: blocked %v, raised before %v, withdrawn %v, raised after %v", what, blocked, soon, withdrawn, later)
			}
			if !planned && !(all(soon, 1) && all(withdrawn, 0) && all(later, 1) && all(blocked, 0)) {
				t.Errorf("%s, unplanned: blocked %v, raised %v, withdrawn %v, raised later %v", what, blocked, soon, withdrawn, later)
			}
		}
	}
}

func requireBlocked(t *testing.T, r *online.Reading, blocked bool) {
	t.Helper()
	said := r.Interval != nil || r.Anytime != nil || r.PNow.Value != nil || r.PAnytime.Value != nil || r.EValue != nil
	if blocked && (said || !strings.Contains(r.Why["interval"], "as planned") || !strings.Contains(r.Why["anytime"], "as planned")) {
		t.Errorf("blocked, and yet: interval %v, anytime %v, p %v, %v, why %v", r.Interval, r.Anytime, r.PNow.Value, r.PAnytime.Value, r.Why)
	}
	if !blocked && r.Interval == nil {
		t.Errorf("not blocked: no interval, %v", r.Why)
	}
	if r.Value == nil || r.StdError == nil {
		t.Errorf("value %v, standard error %v: a block takes the claims, not the numbers", r.Value, r.StdError)
	}
}

// A unit seen in two arms stays in its first, as it was randomised: the effect is nil as it
// is. Letting such units leave selects on behaviour after entry: where 5% of one arm and
// 2% of the other leave, with scores of twice the mean, a lift of
// (1 - .05 2)/(1 - .05) / ((1 - .02 2)/(1 - .02)) - 1 = -.0329 appears where there is none.
// Either way the check of units seen in two arms blocks. Long: 200 paths.
func TestConflictingArms(t *testing.T) {
	for _, leave := range []bool{false, true} {
		c := twoArms(1, 1)
		c.trial.Units.Leave = leave
		c.trial.Scores = []string{"fare"}
		c.trial.Of = []onlinetest.Of{{Formula: "mean(fare)", Contrast: online.Relative}}
		plan := c.trial.Plan()
		want := 0.
		if leave {
			want = (1-.05*2)/(1-.05)/((1-.02*2)/(1-.02)) - 1
		}
		var sum, squares float64
		var blocked rate
		n := paths(16, 200)
		type path struct {
			lift    float64
			blocked bool
		}
		eachPath(n, 63, func(rng *rand.Rand) path {
			d := onlinetest.New(plan)
			at := int64(0)
			for range 8_000 {
				arm := rng.IntN(2)
				both := rng.Float64() < [2]float64{.02, .05}[arm]
				mean := (1 - 2*.02) / (1 - .02)
				if arm == 1 {
					mean = (1 - 2*.05) / (1 - .05)
				}
				if both {
					mean = 2
				}
				at += 1000
				unit := d.Unit(at, c.arms[arm], "", mean+.3*rng.NormFloat64())
				if both {
					d.Event(at+500, unit, c.arms[1-arm], "", 1) // a contrary entry: its fare does not count
				}
			}
			out := d.Step(int64(time.Hour))
			return path{*out.Latest[0].Value, out.Latest[0].Interval == nil}
		}, func(p path) {
			sum += p.lift
			squares += p.lift * p.lift
			blocked.count(p.blocked)
		})
		mean := sum / float64(n)
		se := math.Sqrt((squares/float64(n) - mean*mean) / float64(n-1))
		name := "conflict: first"
		if leave {
			name = "conflict: leave"
		}
		t.Logf("%s: mean lift %.4f, standard error %.4f, want %.4f", name, mean, se, want)
		if math.Abs(mean-want) > 4*se || se > .004 {
			t.Errorf("%s: mean lift %.4f with standard error %.4f, want %.4f", name, mean, se, want)
		}
		requireMost(t, name+": blocked", blocked, .8)
	}
}
