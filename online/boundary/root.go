package boundary

import "math"

// root returns where the monotone f crosses zero between a and b, to the last few
// bits; NaN when it does not cross there.
//
//	source  Chandrupatla 1997, Adv. Eng. Software 28:145: inverse quadratic steps
//	        where the three points allow them, bisection elsewhere
func root(f func(float64) float64, a, b float64) float64 {
	fa, fb := f(a), f(b)
	if fa == 0 {
		return a
	}
	if fb == 0 {
		return b
	}
	if !(fa < 0 && fb > 0 || fa > 0 && fb < 0) {
		return math.NaN()
	}
	t := 0.5
	for range 200 {
		x := a + t*(b-a)
		fx := f(x)
		c, fc := b, fb // the point that leaves the bracket
		if (fx > 0) == (fa > 0) {
			c, fc = a, fa
		} else {
			b, fb = a, fa
		}
		a, fa = x, fx
		best := a
		if math.Abs(fb) < math.Abs(fa) {
			best = b
		}
		least := 2e-16*math.Abs(best) + 1e-300
		if fa == 0 || math.Abs(b-a) <= 2*least {
			return best
		}
		xi, phi := (a-b)/(c-b), (fa-fb)/(fc-fb)
		t = 0.5
		if phi*phi < xi && (1-phi)*(1-phi) < 1-xi {
			t = fa/(fb-fa)*fc/(fb-fc) + (c-a)/(b-a)*fa/(fc-fa)*fb/(fc-fb)
		}
		least /= math.Abs(b - a)
		t = math.Min(1-least, math.Max(least, t))
	}
	return a
}
