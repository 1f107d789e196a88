package boundary

import "math"

// Clock is the time of a sequence relative to its start m, never below 1: the
// running maximum of three readings of it that agree when units come evenly,
//
//	t/m                           the units
//	se_m^2 / se_t^2               the information
//	(t se_t)^2 / (m se_m)^2       the sum of squares
//
// and part when the arms' shares or the scores' variance change. The statistic then
// moves in a time that none of them is alone; the units alone let it cross too often.
type Clock struct {
	Start   float64 // m, units at the start; 0 before it
	StartSE float64 // standard error at the start
	Ratio   float64 // the clock; 0 before the start
}

// Begin sets the start for good. units and se are positive and finite.
func (c *Clock) Begin(units, se float64) { *c = Clock{Start: units, StartSE: se, Ratio: 1} }

// Begun says whether the start is behind.
func (c Clock) Begun() bool { return c.Start > 0 }

// longest bounds the clock so that it stays a finite number whatever happens to the
// standard error; no threshold notices.
const longest = 1e300

// Advance moves a clock that has begun to the present units and standard error. A
// standard error that is no positive number counts for nothing.
func (c *Clock) Advance(units, se float64) {
	now := units / c.Start
	if se > 0 && !math.IsInf(se, 1) {
		info := c.StartSE / se
		squares := now / info
		now = max(now, info*info, squares*squares)
	}
	if now > c.Ratio { // not when NaN
		c.Ratio = math.Min(now, longest)
	}
}
