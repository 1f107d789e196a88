package moment

import "fmt"

// Weighted returns what cells of units of different weights are to a mean that weighs
// them: the units of cells[k] count weights[k] each. With m = sum w z / sum w, the Hajek
// mean, and wbar the mean weight, it is the cell of the values
//
//	m + w (z - m) / wbar
//
// whose mean is m and whose deviations from it are the influence values of the units on m,
// so that whatever is made of a cell's means and moments holds for weighted means, their
// variance and its skewness. Units returns how many there are, not what they weigh. Weights
// need their ratio only, and where all are equal the result is the sum of the cells.
//
//	in      cells of one shape, not changed; as many weights, positive and finite
//	error   wraps ErrShape when the cells differ in shape
//	cost    that of merging the cells, twice
//	source  influence function of a ratio of means, Hajek 1971 (from memory); Demnati, Rao
//	        2004, Surv. Methodol. 30:17, on linearised variables (from memory)
func Weighted(cells []*Cell, weights []float64) (*Cell, error) {
	if len(cells) == 0 || len(cells) != len(weights) {
		return nil, fmt.Errorf("moment: %d weights for %d cells, want one each and at least one", len(weights), len(cells))
	}
	shape := cells[0].shape
	var n int64
	var total float64
	for k, c := range cells {
		if !c.shape.same(shape) {
			return nil, fmt.Errorf("moment: weighted sums of different cells: %w", ErrShape)
		}
		n += c.n
		total += weights[k] * float64(c.n)
	}
	out := NewCell(shape)
	if n == 0 {
		return out, nil
	}
	mean := make([]float64, shape.components)
	for _, c := range cells {
		if c.n > 0 {
			out.origin = c.origin
			break
		}
	}
	for i := range mean {
		var sum Sum
		for k, c := range cells {
			if c.n > 0 {
				sum.AddSum(c.about(out.origin, i).scaled(weights[k]))
			}
		}
		m := sum.over(total)
		if out.origin != nil {
			m.Add(out.origin[i])
		}
		mean[i] = m.Float()
	}
	out.origin = nil
	if err := out.SetOrigin(mean); err != nil {
		return nil, err
	}
	for k, c := range cells {
		part := NewCell(shape)
		part.origin = out.origin
		if err := part.Merge(c); err != nil {
			return nil, err
		}
		ratio := weights[k] / (total / float64(n))
		out.addScaled(part, ratio)
	}
	out.n = n
	return out, nil
}

// about is the sum of component i about another origin.
func (c *Cell) about(origin []float64, i int) Sum {
	var to, from float64
	if origin != nil {
		to = origin[i]
	}
	if c.origin != nil {
		from = c.origin[i]
	}
	s := c.sums[i]
	s.Sub(difference(to, from).times(Sum{Hi: float64(c.n)}))
	return s
}

// addScaled adds the sums of deviations that are so many times as large as those of o.
func (c *Cell) addScaled(o *Cell, ratio float64) {
	second, third := c.shape.components, c.shape.components+len(c.shape.pairs)
	for i, s := range o.sums {
		by := ratio
		if i >= second {
			by *= ratio
		}
		if i >= third {
			by *= ratio
		}
		c.sums[i].AddSum(s.scaled(by))
	}
}
