"""Densities of a Python function: against families with closed forms and SciPy's, and functions that fail."""

import copy
import pickle
import sys
import threading

import numpy as np
import pytest

import limen as lm

stats = pytest.importorskip("scipy.stats")
INF = float("inf")


def normal(mean, sd):
    return lambda x: -0.5 * ((x - mean) / sd) ** 2 - np.log(sd * np.sqrt(2 * np.pi))


def standard_normal(x):     # at the top level, so that it can be pickled
    return -0.5 * x * x - 0.5 * np.log(2 * np.pi)


LAWS = [
    ("gaussian", normal(0.385, 1.7), stats.norm(0.385, 1.7), (-INF, INF)),
    ("student t", stats.t(4, 0.3, 2.0).logpdf, stats.t(4, 0.3, 2.0), (-INF, INF)),
    ("laplace", lambda x: -np.abs(x - 1.1) / 2 - np.log(4), stats.laplace(1.1, 2), (-INF, INF)),
    ("exponential", lambda x: -(x - 1) / 2 - np.log(2), stats.expon(1, 2), (1, INF)),
    ("lognormal", stats.lognorm(2.0).logpdf, stats.lognorm(2.0), (0, INF)),
]


@pytest.mark.parametrize(("logpdf", "law", "support"), [row[1:] for row in LAWS], ids=[row[0] for row in LAWS])
def test_tails_and_moments(logpdf, law, support):
    """1e-12 of the logarithm: SciPy's own tails hold some 1e-13. Moments are sums over many decades: 1e-12."""
    d = lm.custom(logpdf, support)
    q = np.array([1e-290, 1e-100, 1e-13, 0.02, 0.4])
    x = np.concatenate([law.ppf(q), law.isf(q)])
    for name in ("logsf", "logcdf"):
        wanted = getattr(law, name)(x)
        at = wanted > -INF
        np.testing.assert_allclose(getattr(d, name)(x)[at], wanted[at], rtol=1e-12, atol=1e-15)
    assert d.support == support
    assert (d.mean, d.var) == pytest.approx(law.stats(), rel=1e-12)
    assert d.ppf(0.3) == pytest.approx(law.ppf(0.3), rel=1e-12)


def test_jumps_that_nobody_named():
    """1e-15 absolute: halving ends at a few units in the last place of the edges."""
    d = lm.custom(lambda x: np.where((x >= 1) & (x <= 3), -np.log(2), -INF))
    x = np.array([0.0, 1 + 1e-13, 1.04, 2.2, 3 - 1e-13, 4.0])
    np.testing.assert_allclose(d.cdf(x), stats.uniform(1, 2).cdf(x), rtol=0, atol=1e-15)
    np.testing.assert_allclose(d.sf(x), stats.uniform(1, 2).sf(x), rtol=0, atol=1e-15)
    assert (d.mean, d.var) == pytest.approx((2, 1 / 3), rel=1e-12)


def test_a_pole_at_the_edge():
    """1e-12 of the logarithm: the pole is at 0, where doubles are as fine as it needs."""
    d, law = lm.custom(stats.gamma(0.1).logpdf, (0, INF)), stats.gamma(0.1)
    x = np.array([1e-200, 1e-20, 0.3, 50.0])
    np.testing.assert_allclose(d.logcdf(x), law.logcdf(x), rtol=1e-12)
    np.testing.assert_allclose(d.logsf(x), law.logsf(x), rtol=1e-12, atol=1e-15)
    assert (d.mean, d.var) == pytest.approx((0.1, 0.1), rel=1e-12)


def test_tails_far_beyond_doubles():
    """1e4 scales out, where the probability is exp(-5e7): 1e-13 of the logarithm, against the closed form."""
    d, exact = lm.custom(normal(0.8, 0.05)), lm.gaussian(0.8, 0.05)
    x = np.array([2.6, 2.65, 2.7, 2.8, 40.0, 300.8, 500.8])     # 36 to 40 scales: where sums give way to integrals
    np.testing.assert_allclose(d.logsf(x), exact.logsf(x), rtol=1e-13)
    np.testing.assert_allclose(d.logcdf(1.6 - x), exact.logcdf(1.6 - x), rtol=1e-13)


def test_moments_that_do_not_exist():
    cauchy = lm.custom(lambda x: -np.log(np.pi * (1 + x * x)))      # x * x overflows half way out
    assert np.isnan(cauchy.mean) and np.isnan(cauchy.var)
    assert cauchy.logsf(1e300) == pytest.approx(-np.log(np.pi) - np.log(1e300), rel=1e-12)
    heavy = lm.custom(lambda x: np.log(1.5) - 2.5 * np.log(x), (1.0, INF))
    assert heavy.mean == pytest.approx(3.0, rel=1e-12) and heavy.var == INF


def test_levels_are_those_of_the_family():
    """1e-9 relative; both levels, and how they were sought."""
    exact = lm.bayes(lm.States({"a": lm.gaussian(0.8, 0.05), "b": lm.gaussian(1.3, 0.07)}))
    states = lm.States({"a": lm.custom(normal(0.8, 0.05)), "b": lm.custom(normal(1.3, 0.07))})
    rule = lm.bayes(states)
    np.testing.assert_allclose(rule.levels, exact.levels, rtol=1e-9)
    assert rule.decisions.tolist() == exact.decisions.tolist()
    assert "sampled" in rule.search and "exhaustive" not in rule.search
    mixed = lm.bayes(lm.States({"a": lm.custom(normal(0.8, 0.05)), "b": lm.gaussian(1.3, 0.07)}))
    np.testing.assert_allclose(mixed.levels, exact.levels, rtol=1e-9)
    a, b = rule.assess(states), exact.assess(lm.States({"a": lm.gaussian(0.8, 0.05), "b": lm.gaussian(1.3, 0.07)}))
    assert a.error_rate == pytest.approx(b.error_rate, rel=1e-9)


def test_moved_and_mixed():
    d = lm.mixture([0.25, 0.75], [lm.custom(standard_normal), 2.0 * lm.custom(standard_normal) + 5.0])
    e = lm.mixture([0.25, 0.75], [lm.gaussian(0.0, 1.0), lm.gaussian(5.0, 2.0)])
    x = np.linspace(-30, 30, 7)
    for name in ("logpdf", "logcdf", "logsf"):
        np.testing.assert_allclose(getattr(d, name)(x), getattr(e, name)(x), rtol=1e-12, atol=1e-15)


def test_a_comb_of_narrow_peaks_is_found():
    places = np.array([-700.0, -3.0, 0.0, 0.5, 41.0, 9000.0])

    def comb(x):
        return np.logaddexp.reduce([normal(at, 0.01)(x) for at in places]) - np.log(places.size)

    d = lm.custom(comb)
    assert d.cdf(places) == pytest.approx((np.arange(6) + 0.5) / 6, rel=1e-9)


def test_soft_values_and_posteriors():
    states = lm.States({"a": lm.custom(normal(0.0, 1.0)), "b": lm.gaussian(2.0, 1.0)})
    x = np.linspace(-3, 5, 9)
    np.testing.assert_allclose(states.llr(x, "a", "b"), 2 - 2 * x, rtol=1e-12, atol=1e-12)
    np.testing.assert_allclose(states.soft("a", "b", dtype="float64")(x), 2 - 2 * x, atol=1e-6)
    # rows or columns by state, as with the family itself
    exact = lm.States({"a": lm.gaussian(0.0, 1.0), "b": lm.gaussian(2.0, 1.0)})
    np.testing.assert_allclose(states.posterior(x), exact.posterior(x), rtol=1e-9)


def test_beyond_all_supports_as_for_families():
    ours = lm.States({"a": lm.custom(np.zeros_like, (0, 1)), "b": lm.uniform(0.0, 2.0)})
    exact = lm.States({"a": lm.uniform(0.0, 1.0), "b": lm.uniform(0.0, 2.0)})
    x = [-1.0, 0.5, 1.5, 5.0, np.nan]
    np.testing.assert_array_equal(ours.llr(x, "a", "b"), exact.llr(x, "a", "b"))
    np.testing.assert_array_equal(ours.soft("a", "b")(x), exact.soft("a", "b")(x))
    np.testing.assert_allclose(ours.posterior(x), exact.posterior(x), rtol=1e-15)
    assert lm.bayes(ours).levels.tolist() == lm.bayes(exact).levels.tolist()


class Unheard(Exception):
    """An exception that nobody but the callback could have raised."""


def raises(x):
    raise Unheard("sensor model has no value here")


FAILING = [
    ("raises", raises, Unheard, "sensor model has no value here"),
    ("returns nan", lambda x: np.full_like(x, np.nan), ValueError, "nan at the reading"),
    ("returns one too many", lambda x: np.zeros(x.size + 1), ValueError, "shape"),
    ("returns one number", lambda x: 0.0, ValueError, "shape"),
    ("returns text", lambda x: "low", TypeError, "real numbers"),
    ("returns nothing", lambda x: None, TypeError, "None"),
    ("returns complex", lambda x: x + 1j, TypeError, "real numbers"),
    ("is inf", lambda x: np.full_like(x, INF), ValueError, "integral .*inf"),
    ("is nowhere", lambda x: np.full_like(x, -INF), ValueError, "is 0; expected a density that integrates to 1"),
    ("has half the mass", lambda x: np.full_like(x, np.log(0.05)), ValueError, "logpdf.* is 0.5"),
]


@pytest.mark.parametrize(("logpdf", "exception", "words"), [r[1:] for r in FAILING], ids=[r[0] for r in FAILING])
def test_a_function_that_fails_ends_the_work_with_its_reason(logpdf, exception, words):
    with pytest.raises(exception, match=words):
        lm.custom(logpdf, support=(-5.0, 5.0))


@pytest.mark.parametrize("support", [(1.0, 1.0), (2.0, 1.0), (np.nan, 1.0), (INF, INF)])
def test_supports_that_are_no_interval(support):
    with pytest.raises(ValueError, match="support"):
        lm.custom(standard_normal, support)


def test_a_second_opinion():
    d = lm.custom(standard_normal, cdf=stats.norm.cdf)
    assert d == lm.custom(standard_normal)
    with pytest.raises(ValueError, match="cdf is .* expected the integral"):
        lm.custom(standard_normal, cdf=stats.norm(0.0, 1.1).cdf)
    with pytest.raises(ValueError, match="cdf is nan"):
        lm.custom(standard_normal, cdf=lambda x: np.full_like(x, np.nan))
    with pytest.raises(TypeError, match="cdf"):
        lm.custom(standard_normal, cdf=1.0)


def test_arguments_of_another_kind():
    with pytest.raises(TypeError, match="logpdf"):
        lm.custom("normal")
    with pytest.raises(TypeError, match="support"):
        lm.custom(standard_normal, 3.0)


def test_a_function_that_fails_later():
    """Each way of evaluating brings the exception out, and the next call works again."""
    broken = threading.Event()

    def logpdf(x):
        if broken.is_set():
            raise Unheard("lost")
        return standard_normal(x)

    d = lm.custom(logpdf)
    states = lm.States({"a": d, "b": lm.gaussian(2.0, 1.0)})
    rule = lm.bayes(states)
    x = np.linspace(-1, 1, 5000)
    calls = [lambda: d.logpdf(x), lambda: d.logsf(0.1), lambda: d.cdf(0.1), lambda: d.ppf(0.1),
             lambda: lm.bayes(states), lambda: rule.assess(states).error_rate, lambda: states.llr(x, "a", "b"),
             lambda: states.posterior(x), lambda: states.soft("a", "b")]
    for call in calls:
        broken.set()
        with pytest.raises(Unheard):
            call()
        broken.clear()
        call()


def test_from_many_threads():
    d = lm.custom(standard_normal)
    x, got = np.linspace(-3, 3, 10000), []
    threads = [threading.Thread(target=lambda: got.append(d.logpdf(x))) for _ in range(4)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert len(got) == 4 and all((values == got[0]).all() for values in got)


def test_pickle_and_dict():
    d = lm.custom(standard_normal)
    again = pickle.loads(pickle.dumps(d))
    assert again == d and hash(again) == hash(d) and again.logsf(3.0) == d.logsf(3.0)
    assert copy.copy(d) == d and "standard_normal" in repr(d)
    with pytest.raises(TypeError, match="cannot be written down"):
        d.to_dict()
    with pytest.raises((AttributeError, pickle.PicklingError)):
        pickle.dumps(lm.custom(normal(0, 1)))


def test_no_reference_is_kept():
    def fine(x):
        return standard_normal(x)

    def bad(x):
        raise Unheard

    before = sys.getrefcount(fine), sys.getrefcount(bad)
    for _ in range(4):
        d = lm.custom(fine)
        states = lm.States({"a": d, "b": d + 1.0})
        soft = states.soft("a", "b")
        lm.bayes(states)
        del d, states, soft
        with pytest.raises(Unheard):
            lm.custom(bad)
    assert (sys.getrefcount(fine), sys.getrefcount(bad)) == before
