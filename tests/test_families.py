"""Each family against its formula at 50 digits; one row a family."""

import mpmath
import numpy as np
import pytest

import limen as lm


def laplace(x, loc, scale):
    z = (x - loc) / scale
    below = mpmath.exp(z) / 2 if z <= 0 else 1 - mpmath.exp(-z) / 2
    above = mpmath.exp(-z) / 2 if z >= 0 else 1 - mpmath.exp(z) / 2
    return mpmath.exp(-abs(z)) / (2 * scale), below, above


def uniform(x, low, high):
    inside = low <= x <= high
    share = min(max((x - low) / (high - low), mpmath.mpf(0)), mpmath.mpf(1))
    return (1 / (high - low) if inside else mpmath.mpf(0)), share, 1 - share


def exponential(x, scale, low):
    z = (x - low) / scale
    if z < 0:
        return mpmath.mpf(0), mpmath.mpf(0), mpmath.mpf(1)
    return mpmath.exp(-z) / scale, -mpmath.expm1(-z), mpmath.exp(-z)


def gamma(x, shape, scale):
    z = x / scale
    if z <= 0:
        return mpmath.mpf(0), mpmath.mpf(0), mpmath.mpf(1)
    below, above = (mpmath.gammainc(shape, *edges, regularized=True) for edges in ((0, z), (z, mpmath.inf)))
    return z ** (shape - 1) * mpmath.exp(-z) / mpmath.gamma(shape) / scale, below, above


def chi_square(x, dof):
    return gamma(x, dof / 2, mpmath.mpf(2))


def point(x, value):
    return tuple(mpmath.mpf(holds) for holds in (x == value, x >= value, x < value))


def poisson(x, mean):
    if x != mpmath.floor(x):
        return (mpmath.mpf(0), *poisson(mpmath.floor(x), mean)[1:])
    if x < 0:
        return mpmath.mpf(0), mpmath.mpf(0), mpmath.mpf(1)
    mass = mpmath.exp(x * mpmath.log(mean) - mean - mpmath.loggamma(x + 1))
    return mass, *(mpmath.gammainc(x + 1, *edges, regularized=True) for edges in ((mean, mpmath.inf), (0, mean)))


def student_t(x, loc, scale, dof):
    z, half = (x - loc) / scale, mpmath.mpf(1) / 2
    peak = mpmath.gamma((dof + 1) / 2) / mpmath.gamma(dof / 2) / mpmath.sqrt(mpmath.pi * dof)
    tail = mpmath.betainc(dof / 2, half, 0, dof / (dof + z * z), regularized=True) / 2
    below, above = (1 - tail, tail) if z > 0 else (tail, 1 - tail)
    return peak / scale * (1 + z * z / dof) ** (-(dof + 1) / 2), below, above


def cauchy(x, loc, scale):
    return student_t(x, loc, scale, mpmath.mpf(1))


def gaussian(x, mean, sd):
    z = (x - mean) / sd
    return mpmath.npdf(x, mean, sd), mpmath.erfc(-z / mpmath.sqrt(2)) / 2, mpmath.erfc(z / mpmath.sqrt(2)) / 2


ROWS = [
    (lm.gaussian, gaussian, (0.385, 1.7), [-60.0, -3.1, 0.1, 0.385, 2.6, 61.3]),
    (lm.laplace, laplace, (0.385, 1.7), [-1900.0, -3.1, 0.3, 0.385, 0.4, 2.6, 1900.5]),
    (lm.student_t, student_t, (0.385, 1.7, 0.5), [-1e4, -3.1, 0.3, 0.385, 0.4, 2.6, 1e200]),
    (lm.student_t, student_t, (0.385, 1.7, 4.5), [-1e4, -3.1, 0.3, 2.6, 61.3, 1e30]),
    (lm.student_t, student_t, (0.385, 1.7, 30.0), [-1e4, -3.1, 0.3, 2.6, 61.3]),
    (lm.student_t, student_t, (0.385, 1.7, 1e6), [-60.0, -3.1, 0.3, 3.32, 3.34, 61.3]),
    (lm.cauchy, cauchy, (0.385, 1.7), [-1e4, -3.1, 0.3, 2.6, 1e200]),
    (lm.uniform, uniform, (-1.25, 3.5), [-1.3, -1.25, -1.0, 0.1, 3.4375, 3.5, 3.7]),
    (lm.exponential, exponential, (1.7, -0.25), [-0.3, -0.25, -0.2499, 0.7, 3.3, 1900.0]),
    (lm.gamma, gamma, (0.3, 1.7), [-0.1, 1e-30, 0.01, 0.9, 2.6, 61.3, 190.0]),
    (lm.gamma, gamma, (1.0, 1.7), [1e-30, 0.9, 2.6, 1900.0]),
    (lm.gamma, gamma, (16.5, 0.25), [1e-3, 0.9, 4.0, 4.4, 9.5, 400.0]),
    (lm.gamma, gamma, (50.0, 1.7), [1e-3, 40.0, 84.0, 86.5, 87.0, 240.0, 2000.0]),
    (lm.gamma, gamma, (12345.625, 1.0), [11000.0, 12345.0, 12346.5, 13900.0]),
    (lm.chi_square, chi_square, (4.5,), [1e-3, 2.6, 4.5, 61.3, 900.0]),
    (lm.point, point, (1.3,), [-1.0, 1.2, 1.3, 1.4]),
    (lm.poisson, poisson, (0.37,), [-1.0, 0.0, 0.5, 1.0, 7.0, 150.0]),
    (lm.poisson, poisson, (50.5,), [0.0, 3.0, 15.0, 16.0, 50.0, 51.0, 75.5, 76.0, 400.0]),
    (lm.poisson, poisson, (12345.625,), [11000.0, 12345.0, 12346.0, 13900.0]),
]


IDS = [f"{row[0].__name__}{row[2]}" for row in ROWS]


@pytest.mark.parametrize(("make", "formula", "parameters", "readings"), ROWS, ids=IDS)
def test_logarithms_of_density_and_both_tails(make, formula, parameters, readings):
    """Relative 1e-13, or 1e-15 absolute where the logarithm is near 0: the numerical policy of the design."""
    d = make(*parameters)
    for x in readings:
        thinnest = min(tail for tail in (d.logcdf(x), d.logsf(x)) if tail > -np.inf)
        with mpmath.workdps(60 - int(thinnest / 2.3)):      # so that 1 less the thin tail is not 1
            values = formula(mpmath.mpf(x), *map(mpmath.mpf, parameters))
            for name, value in zip(("logpdf", "logcdf", "logsf"), values):
                wanted = float(mpmath.log(value)) if value > 0 else -np.inf
                assert getattr(d, name)(x) == pytest.approx(wanted, rel=1e-13, abs=1e-15), (name, x)


FARTHEST = np.finfo(float).max
CONTINUOUS = [row[::2] for row in ROWS if not row[0](*row[2]).discrete]


@pytest.mark.parametrize(("make", "parameters"), CONTINUOUS, ids=[row[0].__name__ for row in CONTINUOUS])
def test_quantiles_from_both_tails_come_back(make, parameters):
    """To 1e-12 of the logarithm: a quantile is a double, and a reading's rounding moves its tail by some 1e-15 times
    the slope, at most 60 here."""
    d = make(*parameters)
    for q in (1e-300, 1e-20, 0.013, 0.5, 0.87):     # at a finite edge, doubles cannot reach the small ones
        if np.isinf(d.support[1]) and q > d.sf(FARTHEST):       # a heavy tail may reach beyond all doubles
            assert d.logsf(d.isf(q)) == pytest.approx(np.log(q), rel=1e-12)
        if np.isinf(d.support[0]) and q > d.cdf(-FARTHEST):
            assert d.logcdf(d.ppf(q)) == pytest.approx(np.log(q), rel=1e-12)


CROSSINGS = [
    # a point takes one double out of a continuous law, and of two points each takes its half
    (lm.point(1.3), lm.gaussian(0.0, 1.0), [1.3, np.nextafter(1.3, 2.0)]),
    (lm.point(1.5), lm.point(2.5), [2.0]),
    # two Laplace laws of one scale cross once, midway; of two scales twice, on both sides of the narrow one
    (lm.laplace(0.0, 1.0), lm.laplace(3.0, 1.0), [1.5]),
    (lm.laplace(0.0, 1.0), lm.laplace(0.0, 4.0), [-np.log(4) / 0.75, np.log(4) / 0.75]),
    (lm.exponential(1.0), lm.exponential(3.0), [np.log(3) / (1 - 1 / 3)]),
    (lm.poisson(3.2), lm.poisson(11.7), [7.0]),     # (11.7 - 3.2) / log(11.7 / 3.2) = 6.56, and counts are whole
    (lm.uniform(0.0, 1.0), lm.uniform(0.75, 2.75), [np.nextafter(1.0, 2.0)]),
]


@pytest.mark.parametrize(("a", "b", "levels"), CROSSINGS, ids=lambda value: repr(value))
def test_levels_in_closed_form(a, b, levels):
    """Equal priors; 1e-14 relative. Beyond the edge of the higher uniform law the other takes over."""
    rule = lm.bayes(lm.States({"a": a, "b": b}))
    assert rule.levels.tolist() == pytest.approx(levels, rel=1e-14)
    assert rule.search.startswith("exhaustive")


def draw_density(rng):
    """A continuous law with any parameters, or a mixture of such laws."""
    def one():
        loc, scale, shape = 3 * rng.normal(), 10 ** rng.uniform(-2, 1), 10 ** rng.uniform(-0.5, 2.5)
        kinds = (lambda: lm.gaussian(loc, scale), lambda: lm.laplace(loc, scale), lambda: lm.cauchy(loc, scale),
                 lambda: lm.student_t(loc, scale, 3.0), lambda: lm.student_t(loc, scale, shape),
                 lambda: lm.gamma(shape, scale), lambda: loc - lm.gamma(shape, scale), lambda: lm.gamma(3.0, scale),
                 lambda: lm.exponential(scale, loc), lambda: lm.uniform(loc, loc + 3 * scale))
        return kinds[rng.integers(len(kinds))]()

    if rng.integers(2):
        return one()
    weights = rng.dirichlet(np.ones(rng.integers(2, 4)))
    return lm.mixture(weights / weights.sum(), [one() for _ in weights])


@pytest.mark.parametrize("seed", range(40))
def test_decisions_of_mixed_families_are_those_of_their_densities(seed):
    """At readings from -1e130 to 1e130, wherever the two log densities differ by more than their own rounding."""
    rng = np.random.default_rng(seed)
    x = np.unique(np.concatenate([np.sinh(np.linspace(-300, 300, 8001)), np.linspace(-40, 40, 8001)]))
    for _ in range(5):
        a, b, prior = draw_density(rng), draw_density(rng), rng.uniform(0.05, 0.95)
        rule = lm.bayes(lm.States({"a": a, "b": b}, priors=[prior, 1 - prior]))
        of_a, of_b = a.logpdf(x), b.logpdf(x)
        sure = np.isfinite(of_a) | np.isfinite(of_b)
        gap = np.log(prior / (1 - prior)) + np.subtract(of_a, of_b, where=sure, out=np.zeros_like(x))
        rounding = 1e-13 * (1 + np.abs(of_a, where=np.isfinite(of_a), out=np.zeros_like(x))
                            + np.abs(of_b, where=np.isfinite(of_b), out=np.zeros_like(x)))
        sure &= np.abs(gap) > rounding
        assert (rule.decide(x)[sure] == (gap[sure] < 0)).all(), (a, b, prior)
        assert rule.search.startswith("exhaustive"), (a, b, prior)
