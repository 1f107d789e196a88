package boundary

import (
	"fmt"
	"math"
)

// Method names a boundary in readings.
type Method uint8

const (
	Mixture Method = iota // NormalMixture
	Delayed               // DelayedStart
)

func (m Method) String() string {
	switch m {
	case Mixture:
		return "mixture"
	case Delayed:
		return "delayed-start"
	}
	return fmt.Sprintf("method(%d)", uint8(m))
}

// Side says which departures from the null a sequence tests.
type Side uint8

const (
	TwoSided Side = iota
	Greater       // the estimate exceeds the null: z large. What rules out "<= null".
	Less          // the estimate falls short of it: z small. What rules out ">= null".
)

func (s Side) String() string {
	switch s {
	case TwoSided:
		return "two-sided"
	case Greater:
		return "greater"
	case Less:
		return "less"
	}
	return fmt.Sprintf("side(%d)", uint8(s))
}

// Config is what is declared of a sequence before its data.
type Config struct {
	Error  float64 // of this comparison, after all sharing; in (0, 1)
	Method Method
	Side   Side
	// TuneFor is the total of complete units of the compared arms at which the
	// mixture is tightest; 0 for DefaultTuning times the units at the start. A
	// delayed start has no use for it.
	TuneFor float64
}

// DefaultTuning is how many times the units at the start a mixture is tuned for when
// nobody says.
const DefaultTuning = 20

// Validate names the first thing wrong with c.
func (c Config) Validate() error {
	switch {
	case !probability(c.Error):
		return fmt.Errorf("sequence: error = %g, want one between 0 and 1", c.Error)
	case c.Method > Delayed:
		return fmt.Errorf("sequence: no such %v", c.Method)
	case c.Side > Less:
		return fmt.Errorf("sequence: no such %v", c.Side)
	case !(c.TuneFor >= 0) || math.IsInf(c.TuneFor, 1):
		return fmt.Errorf("sequence: tuned for %g units, want a number of them, or 0 for the default", c.TuneFor)
	}
	return nil
}

// Sequence is one sequential comparison of one estimate with one null, from step to
// step. It depends on the order of its looks and can only go forward: units join,
// none leave, looks are not taken back. All fields are its state, for storing.
//
// The first step at which the gate passes (and, for a delayed start, the declared
// time has come) is the start. What is fixed there never moves: the units m, the
// standard error then, and the time the mixture is tuned for. At a later step at
// which the gate fails nothing is said, and neither the running p nor a crossing
// comes of it, since the statistic cannot be trusted there. The clock does go on: the
// units of that step stay in all later ones, whose evidence is measured in the time
// that has passed, and a later clock makes the threshold higher from the tuned time
// on (a delayed start: always).
type Sequence struct {
	Config  Config
	Clock   Clock
	Tuned   float64 // n*, the units the mixture is tuned for; 0 before the start
	P       float64 // running minimum of the p-value; 1 before the start
	Crossed bool    // for good, from the first crossing on
}

// NewSequence returns a sequence before its start. It fails where c does not validate.
func NewSequence(c Config) (Sequence, error) {
	if err := c.Validate(); err != nil {
		return Sequence{}, err
	}
	return Sequence{Config: c, P: 1}, nil
}

// Look is what a sequence is shown at the end of a step. Looks at which no unit was
// added may be left out or repeated; neither changes anything.
type Look struct {
	Units    float64 // complete units of the compared arms together
	StdError float64 // of the estimate
	Z        float64 // (estimate - null)/se at the null of the test, in a form linear under the null
	GateWhy  string  // why the gate fails, "" where it passes
	Started  bool    // for Delayed: the declared time of the start has come
}

// Verdict is what a sequence says at the end of a step.
type Verdict struct {
	Speaking bool
	Why      string // why it is not speaking
	// Critical is the threshold of the statistic: the anytime interval is the set of
	// nulls at which |z| <= Critical (z <= Critical for Greater, z >= -Critical for Less).
	// It is infinite while the sequence is not speaking.
	Critical float64
	PNow     float64 // the p-value of the present step; 1 while not speaking
	PAnytime float64 // its running minimum over the steps at which it spoke; 1 before the start
	HasE     bool    // the method has an e-value and the sequence is speaking
	EValue   float64 // of the present step; at most math.MaxFloat64
	Crossed  bool    // at this step or an earlier one
}

// Step takes the look at the end of a step.
func (s *Sequence) Step(l Look) Verdict {
	why := l.GateWhy
	if why == "" {
		why = unusable(l)
	}
	switch {
	case s.Clock.Begun():
		s.Clock.Advance(l.Units, l.StdError)
	case why == "" && s.Config.Method == Delayed && !l.Started:
		why = "not yet: its declared start has not come"
	case why == "":
		s.begin(l)
	}
	v := Verdict{Speaking: why == "", Why: why, Critical: math.Inf(1), PNow: 1}
	if v.Speaking {
		z := l.Z
		switch s.Config.Side {
		case TwoSided:
			z = math.Abs(z)
		case Less:
			z = -z
		}
		v.Critical, v.PNow, v.EValue, v.HasE = s.judge(z)
		s.P = math.Min(s.P, v.PNow)
		s.Crossed = s.Crossed || z >= v.Critical
	}
	v.PAnytime, v.Crossed = s.P, s.Crossed
	return v
}

// unusable says what keeps a look whose gate passes from being judged.
func unusable(l Look) string {
	switch {
	case !(l.Units > 0) || math.IsInf(l.Units, 1):
		return "not yet: no units"
	case !(l.StdError > 0) || math.IsInf(l.StdError, 1):
		return fmt.Sprintf("the standard error is %g, so that nothing can be said", l.StdError)
	case math.IsNaN(l.Z) || math.IsInf(l.Z, 0):
		return fmt.Sprintf("the statistic is %g, so that nothing can be said", l.Z)
	}
	return ""
}

// begin fixes at a look what holds for good.
func (s *Sequence) begin(l Look) {
	s.Clock.Begin(l.Units, l.StdError)
	if s.Config.Method == Mixture {
		s.Tuned = s.Config.TuneFor
		if s.Tuned == 0 {
			s.Tuned = DefaultTuning * l.Units
		}
	}
}

// judge measures z, upwards or absolute, at the present clock.
func (s *Sequence) judge(z float64) (critical, p, e float64, hasE bool) {
	oneSided := s.Config.Side != TwoSided
	if s.Config.Method == Delayed {
		d := DelayedStart{OneSided: oneSided}
		return d.Critical(s.Config.Error, s.Clock.Ratio), d.P(z, s.Clock.Ratio), 0, false
	}
	m := NormalMixture{OneSided: oneSided}
	u := m.Tuning(s.Config.Error) * s.Clock.Ratio * (s.Clock.Start / s.Tuned)
	u = min(max(u, 1/longest), longest) // where the threshold is beyond any statistic, but a number
	e = math.Min(math.MaxFloat64, math.Exp(m.LogE(z, u)))
	return m.Critical(s.Config.Error, u), m.P(z, u), e, true
}
