"""Score intervals of Miettinen and Nurminen (1985) for two independent proportions.

Run in this folder with mpmath:

    python score.py > score.txt

A line holds x1 n1 x0 n0 level, then low and high of p1 - p0, then of p1 / p0; nan
where the method gives none. From the definition, in 40 digits: the probabilities
that are most likely under a null are found by bisection on the derivative of the
likelihood, not by the closed form, and the interval's ends by bisection on the
statistic. (statsmodels 0.15.0 has the ratio, but its interval of the difference
rests on a cubic with a wrong coefficient, statsmodels issue 10269.)
"""

import mpmath
from mpmath import mp, mpf

mp.dps = 40
CASES = [
    (56, 70, 48, 80), (9, 10, 3, 10), (10, 10, 0, 20), (0, 10, 0, 20), (5, 56, 0, 29),
    (0, 29, 5, 56), (24, 1000, 30, 1200), (1, 500, 3, 40), (12, 30, 12, 30), (7, 2000, 2, 2100), (30, 30, 29, 30),
]


def bisect(inside, a, b):
    """Where inside, true at a and from there up to some point, turns false on the way to b."""
    for _ in range(130):
        m = (a + b) / 2
        if inside(m):
            a = m
        else:
            b = m
    return (a + b) / 2


def slope(x, n, p):
    """Derivative of the log-likelihood of x successes in n at p, terms without data left out."""
    return (x / p if x else mpf(0)) - ((n - x) / (1 - p) if n - x else mpf(0))


def statistic(x1, n1, x0, n0, given, rate, top, bottom, weight, distance):
    """Score statistic when p1 = given(p0): the likelihood rises in p0 as long as slope0 + rate slope1 > 0."""
    p0 = bisect(lambda p: slope(x0, n0, p) + rate * slope(x1, n1, given(p)) > 0, bottom, top)
    p1 = given(p0)
    v = (p1 * (1 - p1) / n1 + weight**2 * p0 * (1 - p0) / n0) * mpf(n1 + n0) / (n1 + n0 - 1)
    return distance / mpmath.sqrt(v)


def difference(d, x1, n1, x0, n0):
    eps = mpf(10) ** -38
    return statistic(x1, n1, x0, n0, lambda p: p + d, 1, min(mpf(1), 1 - d) - eps, max(mpf(0), -d) + eps, 1, mpf(x1) / n1 - mpf(x0) / n0 - d)


def ratio(t, x1, n1, x0, n0):
    eps = mpf(10) ** -38
    return statistic(x1, n1, x0, n0, lambda p: t * p, t, min(mpf(1), 1 / t) * (1 - eps), eps, t, mpf(x1) / n1 - t * mpf(x0) / n0)


print(f"# mpmath {mpmath.__version__}, 40 digits")
for case in CASES:
    x1, n1, x0, n0 = case
    for level in ("0.95", "0.99"):
        c = mpmath.sqrt(2) * mpmath.erfinv(mpf(level))
        d = mpf(x1) / n1 - mpf(x0) / n0
        tiny = mpf(10) ** -30
        row = [bisect(lambda v: difference(v, *case) < c, d - tiny, -1 + tiny)]
        row.append(bisect(lambda v: difference(v, *case) > -c, d + tiny, 1 - tiny) if d < 1 else mpf(1))
        if x0 == 0:
            row += [mpmath.nan] * 2
        else:
            t = mpf(x1) / n1 / (mpf(x0) / n0)
            row.append(bisect(lambda v: ratio(v, *case) < c, t * (1 - tiny), tiny) if x1 else mpf(0))
            row.append(bisect(lambda v: ratio(v, *case) > -c, t + tiny, mpf(10) ** 6))
        print(*case, level, *(mpmath.nstr(v, 17) for v in row))
