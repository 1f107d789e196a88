package online_test

import (
	"math"
	"math/rand/v2"
	"testing"
	"time"

	"stillwell/online"
	"stillwell/online/onlinetest"
)

// Time buckets whose scores depend on each other, AR(1) with .3: the variance of batches
// keeps the interval for one look and the one for all looks, where the variance of
// independent units misses by .15 (their standard error is too small by sqrt(1.3/.7)).
// Realised with batches: .022 at .05 in a simulation with numpy of a few thousand paths.
// Where the program is made to take the variance of independent units, both err with .13.
// One event a bucket; the first bucket is a fraction and left out. Long: 2,000 paths.
func TestIntervalsOfTimeBuckets(t *testing.T) {
	const phi = .3
	minute := int64(time.Minute)
	trial := onlinetest.Trial{Units: online.Units{Kind: online.Buckets, Every: time.Minute}, Every: time.Minute, Scores: []string{"x"},
		Of: []onlinetest.Of{{Formula: "mean(x)", Start: 1}}}
	plan := trial.Plan()
	type path struct{ anytime, batches, naive, early bool }
	var anytime, batches, naive rate
	at := looks(16, size(1_024, 8_192), 2*growth())
	eachPath(paths(300, 2000), 51, func(rng *rand.Rand) (p path) {
		d := onlinetest.New(plan)
		var n, sum, squares float64
		x := rng.NormFloat64()
		bucket := int64(0)
		for _, last := range at {
			for ; bucket <= int64(last); bucket++ {
				d.Unit(bucket*minute+1, "", "", x)
				if bucket > 0 {
					n, sum, squares = n+1, sum+x, squares+x*x
				}
				x = phi*x + math.Sqrt(1-phi*phi)*rng.NormFloat64()
			}
			r := d.Step(bucket * minute).Latest[0]
			if r.Units[0].N != int64(last) {
				t.Errorf("%d buckets, want %d", r.Units[0].N, last)
			}
			p.early = p.early || last < 64 && (r.Interval != nil || r.Anytime != nil)
			p.anytime = p.anytime || r.Anytime != nil && outside(*r.Anytime, 0)
			if last == at[len(at)-1] && r.Interval != nil {
				p.batches = outside(*r.Interval, 0)
			}
		}
		p.naive = math.Abs(sum/n) > 1.96*math.Sqrt((squares-sum*sum/n)/(n*(n-1)))
		return p
	}, func(p path) {
		anytime.count(p.anytime)
		batches.count(p.batches)
		naive.count(p.naive)
		if p.early {
			t.Error("an interval from fewer than 64 batches")
		}
	})
	requireWithin(t, "buckets AR(1) .3, one look", batches, .05)
	requireWithin(t, "buckets AR(1) .3, all looks", anytime, .05)
	requireBeyond(t, "buckets AR(1) .3, one look: as if independent", naive, .05)
}

// Batches of skewed buckets are skewed while they are short: the boundary waits until there
// are k times their squared skewness, as it does for units. From 64 batches on, whatever
// they hold, a delayed start at .05 erred with .075 for a bucket in twenty that counts one, .069 for
// lognormal buckets and .196 for such of a standard deviation of 1.5. Long: 1,000 paths.
func TestAnytimeIntervalsOfSkewedBuckets(t *testing.T) {
	minute := int64(time.Minute)
	heavy := law{"lognormal 1.5", math.Exp(1.125), func(rng *rand.Rand) float64 { return math.Exp(1.5 * rng.NormFloat64()) }}
	for _, l := range []law{exponential, twentieth, lognormal, heavy} {
		trial := onlinetest.Trial{Units: online.Units{Kind: online.Buckets, Every: time.Minute}, Every: time.Minute, Scores: []string{"x"},
			Of: []onlinetest.Of{{Formula: "mean(x)", Start: 1}}}
		plan := trial.Plan()
		at := looks(64, size(1_024, 4_096), growth())
		var missed, spoke rate
		eachPath(paths(150, 1000), 53, func(rng *rand.Rand) (m [2]bool) {
			d := onlinetest.New(plan)
			d.Begin(0)
			bucket := int64(1)
			for _, last := range at {
				for ; bucket <= int64(last); bucket++ {
					d.Unit(bucket*minute, "", "", l.draw(rng))
				}
				if r := d.Step(bucket * minute).Latest[0]; r.Anytime != nil {
					m[0], m[1] = m[0] || outside(*r.Anytime, l.mean), true
				}
			}
			return m
		}, func(m [2]bool) {
			missed.count(m[0])
			spoke.count(m[1])
		})
		requireWithin(t, "buckets, "+l.name+", all looks", missed, .05)
		tell(t, "buckets, "+l.name+", all looks: had any", spoke, "")
	}
}

// Without a comparison of arms, days shake all their units alike: here a design effect of
// 13.5, under which the interval of a sample of units on these days misses the mean of days to
// come by .59 at .05. The anytime interval is therefore null, with that reason, until 64
// whole days, and covers from then on; with the variance of independent units in the
// program it errs with .63. Days of 50 units with shocks of half a unit's
// standard deviation. Long: 800 paths of 512 days.
func TestAnytimeIntervalsUnderDayShocks(t *testing.T) {
	day := int64(24 * time.Hour)
	const units, shock = 50, .5
	trial := onlinetest.Trial{Every: 24 * time.Hour, Scores: []string{"x"}, Of: []onlinetest.Of{{Formula: "mean(x)", Start: 1}}}
	plan := trial.Plan()
	days := size(128, 512)
	type path struct{ anytime, spoke, naive bool }
	var anytime, spoke, naive rate
	eachPath(paths(120, 800), 52, func(rng *rand.Rand) (p path) {
		d := onlinetest.New(plan)
		for k := range days {
			level := shock * rng.NormFloat64()
			for i := range units {
				d.Unit(int64(k)*day+int64(i+1)*int64(time.Second), "", "", level+rng.NormFloat64())
			}
			if !long && k%6 != 0 && k != days-1 {
				continue
			}
			r := d.Step(int64(k+1) * day).Latest[0]
			// The first day is left out, and the last not over before a unit of the next.
			if k < 65 && (r.Anytime != nil || r.Why["anytime"] == "") {
				t.Errorf("after %d days: anytime %v, %q", k+1, r.Anytime, r.Why["anytime"])
			}
			p.spoke = p.spoke || r.Anytime != nil
			p.anytime = p.anytime || r.Anytime != nil && outside(*r.Anytime, 0)
			p.naive = outside(*r.Interval, 0)
		}
		return p
	}, func(p path) {
		anytime.count(p.anytime)
		spoke.count(p.spoke)
		naive.count(p.naive)
	})
	requireWithin(t, "day shocks, all looks", anytime, .05)
	requireMost(t, "day shocks, all looks: had any", spoke, .9)
	requireBeyond(t, "day shocks, one look: a sample of units on these days", naive, .05)
}
