package allocation

import (
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"

	"stillwell/online/wire"
)

// Plan is what a check is made of; it is declared before the data and no part of the state.
type Plan struct {
	What   string    // what is counted, in words: "units entered"
	Arms   []string  // in the order of the counts
	Shares []float64 // planned, in any measure: 1 and 1, or 90 and 10
	Error  float64   // of this check; 0 for Error
}

// Check is one running check. It takes the counts so far at each step and blocks for
// good at the first at which they contradict the plan; a block ends only with a new
// Check that counts from a stated time on. All exported fields are its state.
type Check struct {
	plan   Plan
	shares []float64 // adding up to 1

	MaxLogE float64 // largest so far; 0 before any counts
	Blocked bool
	Counts  []int64 // those at the block; nil while there is none
}

// New returns a check before its first counts. It fails unless there are two or more
// arms, each with a name and a planned share above 0, and an error in (0, 1).
func New(p Plan) (*Check, error) {
	if p.Error == 0 {
		p.Error = Error
	}
	if !(p.Error > 0 && p.Error < 1) {
		return nil, fmt.Errorf("allocation of %s: error = %g, want one between 0 and 1", p.What, p.Error)
	}
	if len(p.Arms) < 2 || len(p.Shares) != len(p.Arms) {
		return nil, fmt.Errorf("allocation of %s: %d arms and %d planned shares, want one share for each of two or more arms",
			p.What, len(p.Arms), len(p.Shares))
	}
	total := 0.0
	for i, s := range p.Shares {
		if !(s > 0) || math.IsInf(s, 1) {
			return nil, fmt.Errorf("allocation of %s: planned share of %s = %g, want a number above 0", p.What, p.Arms[i], s)
		}
		total += s
	}
	c := &Check{plan: p, shares: make([]float64, len(p.Shares))}
	for i, s := range p.Shares {
		c.shares[i] = s / total
		if !(c.shares[i] > 0) {
			return nil, fmt.Errorf("allocation of %s: planned share of %s = %g is too small beside %g in all", p.What, p.Arms[i], s, total)
		}
	}
	return c, nil
}

// Step takes the counts so far, one for each arm, at the end of a step, and returns why
// comparisons are blocked, for a person to read; "" while they are not. Once blocked
// the reason holds, with the counts it arose from.
func (c *Check) Step(counts []int64) (why string) {
	if len(counts) != len(c.shares) {
		panic(fmt.Sprintf("allocation of %s: %d counts for %d arms", c.plan.What, len(counts), len(c.shares)))
	}
	if !c.Blocked {
		if e := LogE(counts, c.shares, Concentration); e > c.MaxLogE {
			c.MaxLogE = e
		}
		if c.MaxLogE >= -math.Log(c.plan.Error) {
			c.Blocked, c.Counts = true, slices.Clone(counts)
		}
	}
	return c.Why()
}

// Why is the reason of the block, "" while there is none.
func (c *Check) Why() string {
	if !c.Blocked {
		return ""
	}
	parts, plan := make([]string, len(c.Counts)), make([]string, len(c.Counts))
	for i, n := range c.Counts {
		parts[i] = fmt.Sprintf("%d %s", n, c.plan.Arms[i])
		plan[i] = strconv.FormatFloat(c.plan.Shares[i], 'g', -1, 64)
	}
	return fmt.Sprintf("%s: %s where %s was planned (e-value %s)",
		c.plan.What, strings.Join(parts, ", "), strings.Join(plan, ":"), printE(c.MaxLogE))
}

// printE writes an e-value of which only the logarithm is known to be a number.
func printE(logE float64) string {
	if logE > math.Log(1e9) {
		return "above 1e+" + strconv.Itoa(int(logE/math.Ln10))
	}
	digits := strconv.FormatInt(int64(math.Round(math.Exp(logE))), 10)
	for i := len(digits) - 3; i > 0; i -= 3 {
		digits = digits[:i] + "," + digits[i:]
	}
	return digits
}

// stateVersion is the first byte of a stored check. The rest, in the forms of package wire:
//
//	largest log e-value   F64
//	blocked               Bool
//	counts, if blocked    one U64 for each arm of the plan
const stateVersion = 1

// AppendBinary appends the state to b; the plan is not in it. The error is always nil.
func (c *Check) AppendBinary(b []byte) ([]byte, error) {
	w := wire.Writer{B: b}
	w.U8(stateVersion)
	w.F64(c.MaxLogE)
	w.Bool(c.Blocked)
	for _, n := range c.Counts {
		w.U64(uint64(n))
	}
	return w.B, nil
}

// Decode reads the state of a check of that plan from the front of b and returns what follows it.
//
//	error  wraps wire.ErrMalformed for what no such check can be
func Decode(p Plan, b []byte) (*Check, []byte, error) {
	c, err := New(p)
	if err != nil {
		return nil, nil, err
	}
	r := wire.NewReader(b)
	if v := r.U8(); v != stateVersion {
		r.Fail("version %d, want %d", v, stateVersion)
	}
	c.MaxLogE = r.F64()
	c.Blocked = r.Bool()
	if c.Blocked {
		c.Counts = make([]int64, len(c.shares))
		for i := range c.Counts {
			if c.Counts[i] = int64(r.U64()); c.Counts[i] < 0 {
				r.Fail("count of %s is negative", c.plan.Arms[i])
			}
		}
	}
	if over := c.MaxLogE >= -math.Log(c.plan.Error); !(c.MaxLogE >= 0) || math.IsInf(c.MaxLogE, 1) || over != c.Blocked {
		r.Fail("largest log e-value = %g, blocked %t, at error %g", c.MaxLogE, c.Blocked, c.plan.Error)
	}
	if err := r.Err(); err != nil {
		return nil, nil, fmt.Errorf("stored allocation of %s: %w", p.What, err)
	}
	return c, b[len(b)-r.Remaining():], nil
}

// Error is the check's own error; it blocks at an e-value of one over it.
func (c *Check) Error() float64 { return c.plan.Error }
