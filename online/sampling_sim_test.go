package online_test

import (
	"math"
	"math/rand/v2"
	"testing"
	"time"

	"stillwell/online"
	"stillwell/online/onlinetest"
)

// A crowd is a stream of units, each with one event, of whom more come than there is room for.
// They count for six hours.
type crowd struct {
	of      []onlinetest.Of
	traffic []int     // units by hour
	level   []float64 // of their scores, by hour
	effect  float64   // of arm wide on scores
	skewed  bool
	limit   int // of open units
	seed    uint64
	paths   int
	least   float64 // halvings on average that make a test of it
}

func (c *crowd) plan() *online.Plan {
	trial := onlinetest.Trial{Scores: []string{"past", "fare", "visits", "bought?"}, Of: c.of,
		Units: online.Units{Baseline: "current", Arms: []online.Arm{{Name: "current", Share: 1}, {Name: "wide", Share: 1}}}}
	plan := trial.Plan()
	plan.Limits.Units = c.limit
	plan.Studies[0].Units.FollowUp = 6 * time.Hour
	return plan
}

// mean is that of the levels of all who come.
func (c *crowd) mean() (level float64, units int) {
	for step, n := range c.traffic {
		level += float64(n) * c.level[step]
		units += n
	}
	return level / float64(units), units
}

// walk takes a path, and then steps in which the last units become complete.
func (c *crowd) walk(rng *rand.Rand, plan *online.Plan, see func(out *online.Output)) {
	d := onlinetest.New(plan)
	for step := range len(c.traffic) + 8 {
		if step < len(c.traffic) {
			at := int64(step) * int64(time.Hour)
			for range c.traffic[step] {
				at += int64(time.Millisecond)
				arm, effect := "current", 0.
				if rng.IntN(2) == 1 {
					arm, effect = "wide", c.effect
				}
				past, noise := rng.NormFloat64(), rng.NormFloat64()
				if c.skewed {
					noise = rng.ExpFloat64() - 1
				}
				bought := 0.
				if rng.Float64() < .1*c.level[step] {
					bought = 1
				}
				d.Unit(at, arm, "", past, c.level[step]+effect+past+noise, float64(1+rng.IntN(3)), bought)
			}
		}
		out := d.Step(int64(step+1) * int64(time.Hour))
		see(&out)
	}
}

// comparisons are what a crowd is asked for.
var comparisons = []onlinetest.Of{
	{Formula: "mean(fare)", Name: "mean"},
	{Formula: "mean(fare)", Name: "difference", Contrast: online.Difference},
	{Formula: "mean(fare)", Name: "delayed", Contrast: online.Difference, Start: 1},
	{Formula: "mean(fare)", Name: "adjusted", Contrast: online.Difference, Adjust: []string{"past"}, Start: 1},
	{Formula: "mean(fare)", Name: "relative", Contrast: online.Relative},
	{Formula: "mean(fare) / mean(visits)", Name: "ratio"},
	{Formula: "mean(bought)", Name: "share"},
	{Formula: "mean(bought)", Name: "shares", Contrast: online.Difference},
}

// truths are the values of comparisons, by estimate and arm.
func (c *crowd) truths() map[[2]string]float64 {
	level, _ := c.mean()
	return map[[2]string]float64{
		{"mean", "current"}: level, {"mean", "wide"}: level + c.effect,
		{"difference", "wide"}: c.effect, {"delayed", "wide"}: c.effect, {"adjusted", "wide"}: c.effect, {"relative", "wide"}: c.effect / level,
		{"ratio", "current"}: level / 2, {"ratio", "wide"}: (level + c.effect) / 2,
		{"share", "current"}: .1 * level, {"share", "wide"}: .1 * level, {"shares", "wide"}: 0,
	}
}

// told is what the readings of one comparison said on a path.
type told struct {
	off, se float64 // the last value's distance from the truth, and its standard error
	fixed   bool    // the last interval for one look missed, or there was none
	anytime bool    // an anytime interval missed, at any step
	spoke   bool
}

// summary is what all paths said.
type summary struct {
	fixed, anytime, spoke rate
	off, se, square       float64
}

// follow takes the paths, and fails where an estimate is biased or its intervals err too often.
// Contrasts speak on a share of the paths at least.
func (c *crowd) follow(t *testing.T, speaks float64) {
	t.Helper()
	c.of = comparisons
	plan, truths := c.plan(), c.truths()
	all := map[[2]string]*summary{}
	for k := range truths {
		all[k] = &summary{}
	}
	type path struct {
		told         map[[2]string]told
		kept, halved float64
	}
	var kept, halved float64
	eachPath(c.paths, c.seed, func(rng *rand.Rand) path {
		p := path{told: map[[2]string]told{}}
		c.walk(rng, plan, func(step *online.Output) {
			for i := range step.Latest {
				r := &step.Latest[i]
				k := [2]string{r.Estimate, r.Arm}
				truth, s := truths[k], p.told[k]
				if r.Anytime != nil {
					s.spoke, s.anytime = true, s.anytime || outside(*r.Anytime, truth)
				}
				if r.Value != nil && r.StdError != nil {
					s.off, s.se = *r.Value-truth, *r.StdError
				}
				s.fixed = r.Interval == nil || outside(*r.Interval, truth)
				p.told[k] = s
				if r.Contrast != "" {
					p.kept, p.halved = float64(r.Units[0].N+r.Units[1].N), -math.Log2(r.Sampling)
				}
			}
		})
		return p
	}, func(p path) {
		kept += p.kept / float64(c.paths)
		halved += p.halved / float64(c.paths)
		for k, s := range p.told {
			a := all[k]
			a.fixed.count(s.fixed)
			a.anytime.count(s.anytime)
			a.spoke.count(s.spoke)
			a.off += s.off / float64(c.paths)
			a.se += s.se / float64(c.paths)
			a.square += s.off * s.off / (s.se * s.se) / float64(c.paths)
		}
	})
	_, came := c.mean()
	t.Logf("%.0f of %d units kept, halved %.1f times", kept, came, halved)
	if kept > float64(came)/2 || halved < c.least {
		t.Errorf("%.0f of %d units kept, halved %.1f times: too few for this test", kept, came, halved)
	}
	for _, e := range comparisons {
		for _, arm := range []string{"current", "wide"} {
			if s := all[[2]string{e.Name, arm}]; s != nil {
				s.require(t, e.Name+" of "+arm)
				if e.Contrast != online.NoContrast {
					requireWithin(t, e.Name+" of "+arm+", all looks", s.anytime, .05)
					requireMost(t, e.Name+" of "+arm+" speaks", s.spoke, speaks)
				}
			}
		}
	}
}

func (s *summary) require(t *testing.T, what string) {
	t.Helper()
	requireWithin(t, what+", one look", s.fixed, .05)
	bias, most := s.off/s.se, 4/math.Sqrt(float64(s.fixed.paths))
	t.Logf("off by %.3f standard errors on average, mean square %.3f", bias, s.square)
	if !(math.Abs(bias) < most) {
		t.Errorf("%s is off by %.3f standard errors on average, want within %.3f", what, bias, most)
	}
}

// Estimates of a sampled study are consistent, and their intervals cover, while the
// probability of admission changes under way. Traffic grows tenfold and the scores drift,
// so that most of those who came late were not kept and a mean without weights is far off; so
// are ratios and shares. Differences, relative lifts and adjusted ones have their anytime
// intervals, which cover at all steps together. Long: 4,000 paths, in which a mean is
// off by .05 standard errors: a ratio of sums, whose bias falls with the number of units.
func TestSampledEstimates(t *testing.T) {
	c := crowd{effect: .3, limit: 150, seed: 77, paths: paths(120, 4000), least: 2}
	for step := range 60 {
		c.traffic = append(c.traffic, 20+3*step)
		c.level = append(c.level, 1+float64(step)/60)
	}
	c.follow(t, .9)
}

// A flood of new units within one step halves the probability many times at once, in each
// shard on its own. What came before weighs little then and a few units much; as long as they do,
// intervals have few degrees of freedom, or none, and sequences are silent. Scores are skewed.
// Sequences with a delayed start, which spend all their error, are among those. Long: 3,000 paths.
func TestSampledAfterFlood(t *testing.T) {
	c := crowd{effect: .3, skewed: true, limit: 200, seed: 78, paths: paths(60, 3000), least: 3.5}
	for step := range 50 {
		n := 60
		if step == 20 {
			n = 8000
		}
		c.traffic, c.level = append(c.traffic, n), append(c.level, 2)
	}
	c.follow(t, .5)
}
