package influence

import (
	"math"

	"stillwell/online/moment"
)

// A Curve gives the influence value of any unit of one arm on an effect, as a linear
// function of the unit's vector z: its scores, then the covariates of the
// adjustment. It is in the effect's unit, scaled so that the squares of all units,
// those of the Rest among them, sum to the square of StdError. Weight and Centre are
// what moment.Heavy ranks units by.
type Curve struct {
	Weight, Centre []float64
}

// Curve returns the influence curve for units that take part as role. The scores of
// units of the Rest do not matter, their covariates do.
func (e *Effect) Curve(role Role) Curve {
	k := len(e.arms[One].Mean)
	pool := e.pool()
	size := k
	if pool != nil {
		size += len(pool.Mean)
	}
	c := Curve{make([]float64, size), make([]float64, size)}
	if pool != nil {
		// Through the mean of the covariates, to which every unit adds.
		copy(c.Centre[k:], pool.Mean)
		copy(c.Weight[k:], e.carried(e.grad))
		scale(c.Weight[k:], 1/math.Sqrt(pool.divisor()))
	}
	if role == Rest || e.arms[role] == nil {
		return c
	}
	// Through the arm's own mean, less what the covariates explain of the scores.
	arm := e.arms[role]
	s := 1 / math.Sqrt(float64(arm.Units)*arm.Freedom)
	copy(c.Centre, arm.Mean)
	for j, g := range e.grad[role] {
		c.Weight[j] = s * g
		for i := range size - k {
			c.Weight[k+i] -= s * arm.Slopes[i*k+j] * g
		}
	}
	return c
}

// At returns the influence value of a unit with vector z.
func (c Curve) At(z []float64) float64 {
	var sum float64
	for i, w := range c.Weight {
		if w != 0 {
			sum += w * (z[i] - c.Centre[i])
		}
	}
	return sum
}

// SumOfSquares returns that of the influence values of all units in a cell, whose
// listed components are the curve's scores and covariates.
func (c Curve) SumOfSquares(cell *moment.Cell, components []int) float64 {
	var off float64 // from zero, of their mean
	for i, w := range c.Weight {
		if w != 0 {
			off += w * (cell.Mean(components[i]) - c.Centre[i])
		}
	}
	return c.squares(cell, components) + float64(cell.Units())*off*off
}

// squares is the sum of squared deviations from their mean.
func (c Curve) squares(cell *moment.Cell, components []int) float64 {
	if cell.Units() < 2 {
		return 0
	}
	size := len(components) * len(components)
	high, low := make([]float64, size), make([]float64, size)
	cell.MeanCovariance(components, high, low)
	n := float64(cell.Units())
	return n * (n - 1) * moment.Form(high, low, c.Weight, c.Weight)
}

// Skewness returns the skewness of the influence values of all units in a cell, whose
// listed components are the curve's scores and covariates, without a pass over the
// units: third moments contracted with the curve's weights. Not a number where the
// values do not vary. Panics where the cell does not keep the third moments.
func (c Curve) Skewness(cell *moment.Cell, components []int) float64 {
	var cubes float64
	for i, x := range c.Weight {
		if x == 0 {
			continue
		}
		for j, y := range c.Weight[:i+1] {
			if y == 0 {
				continue
			}
			for k, w := range c.Weight[:j+1] {
				if w != 0 {
					cubes += arrangements(i, j, k) * x * y * w * cell.Third(components[i], components[j], components[k])
				}
			}
		}
	}
	squares := c.squares(cell, components)
	if squares == 0 {
		return math.NaN()
	}
	n := float64(cell.Units())
	return cubes / n / math.Pow(squares/n, 1.5)
}

// arrangements counts the orders of three indices, i >= j >= k.
func arrangements(i, j, k int) float64 {
	switch {
	case i == k:
		return 1
	case i == j || j == k:
		return 3
	}
	return 6
}
