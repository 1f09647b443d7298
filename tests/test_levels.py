"""Levels of mixtures of Gaussians against a search of another kind, settled by mpmath: none missed, none invented."""

import mpmath
import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as some
from reference import levels as other

import limen as lm


def assert_found(problem):
    """Each level within 4 units in the last place, and the rounding of the log densities over the slope of the gap."""
    missed, invented, count, agree = other.compare(problem)
    assert (missed, invented, agree) == ([], [], True)
    return count


def test_the_comparison_sees_wrong_rules(monkeypatch):
    """A level left out with its interval, one put in, one moved by 40 units in the last place, decisions swapped."""
    problem = HARD["close pairs"][0]
    right, names = problem.rule(), problem.states().names
    levels, decisions = right.levels.tolist(), right.decisions.tolist()
    for wrong in (([levels[0], *levels[3:]], decisions[:3]), ([*levels, 3.0, 3.5], [*decisions, 1, 0]),
                  ([levels[0] * (1 + 40 * 2.0**-52), *levels[1:]], decisions), (levels, [1 - d for d in decisions])):
        monkeypatch.setattr(other.Problem, "rule", lambda self, wrong=wrong: lm.rule(*wrong, names))
        missed, invented, _, agree = other.compare(problem)
        assert missed or invented or not agree


@given(some.integers(0, 2**63))
@settings(derandomize=True, max_examples=50, deadline=None, suppress_health_check=list(HealthCheck))
def test_random_mixtures(seed):
    assert_found(other.random_problem(np.random.default_rng(seed)))


@given(some.integers(0, 2**63))
@settings(derandomize=True, max_examples=40, deadline=None, suppress_health_check=list(HealthCheck))
def test_awkward_mixtures(seed):
    assert_found(other.awkward_problem(np.random.default_rng(seed)))


@pytest.mark.parametrize("seed", [12, 151, 258, 1378, 1897, 2034, 2411, 2632, 3036, 25325, 284837])
def test_awkward_mixtures_that_once_failed(seed):
    assert_found(other.awkward_problem(np.random.default_rng(seed)))


@pytest.mark.slow
def test_more_random_mixtures():
    """`python tests/reference/levels.py --count 10000` tries as many as one has time for."""
    for seed in range(100_000, 100_400):
        assert_found(other.random_problem(np.random.default_rng(seed)))
        assert_found(other.awkward_problem(np.random.default_rng(seed)))


def one(mean, sd):
    return [1.0], [mean], [sd]


HARD = {
    "a comb": (other.Problem([0.5, 0.5], [([1 / 12] * 12, [2.0 * k for k in range(12)], [0.2] * 12),
                                          ([1 / 12] * 12, [2.0 * k + 1 for k in range(12)], [0.2] * 12)]), 23),
    "a spike of width 1e-10": (other.Problem([0.5, 0.5], [
        ([0.999, 0.001], [0.0, 1.2345678], [1.0, 1e-10]), one(0.1, 1.0)]), 3),
    "a spike far from all": (other.Problem([0.5, 0.5], [
        ([1 - 1e-9, 1e-9], [0.0, 1e6], [1.0, 1e-10]), ([0.5, 0.5], [0.1, 3.0], [1.0, 2.0])]), 4),
    "sds 1 and 1 + 1e-10": (other.Problem([0.5, 0.5], [one(0.0, 1.0), one(1.0, 1 + 1e-10)]), 2),
    "the same with a third term": (other.Problem([0.5, 0.5], [
        ([0.75, 0.25], [0.0, 0.5], [1.0, 0.5]), one(1.0, 1 + 1e-10)]), 2),
    "levels at 1e9": (other.Problem([0.5, 0.5], [
        ([0.5, 0.5], [1e9, 1e9 + 3], [1.0, 0.5]), ([0.3, 0.7], [1e9 + 1, 1e9 - 2], [0.7, 1.5])]), 4),
    "far scales": (other.Problem([0.5, 0.5], [one(0.0, 1e-6), ([0.5, 0.5], [0.0, 1e3], [1e2, 1e-6])]), 2),
    # Rounding of the bounds once settled two pieces that met at -3.53 for two signs, and the level between was lost.
    "a level where two pieces meet": (other.Problem([0.5, 0.5], [
        ([0.2578412225483022, 0.2051266640764455, 0.26064865873556947, 0.2763834546396829],
         [16.164354510887087, 16.164354510887087, 16.164354510887087, -7.573042822723486],
         [0.5509516958792019, 6.17698465641759e-09, 1.4143820539228156, 0.6670138861291666]),
        ([0.9999999999995882, 4.1179328350686923e-13], [0.6467852518123148, -7.573042822723486],
         [0.6670138714986149, 0.5509506551347862])]), 2),
    # Products of small slopes and small weights underflowed and a slope of two signs passed for one.
    "slopes of 1e-30": (other.Problem([0.5, 0.5], [
        ([0.9999999985209463, 1.4790536444780513e-09], [-9.999999989112965e+35, -1.0000000160291218e+36],
         [1.8943480107498003e+29, 1.1175380700487687e+25]),
        ([0.23549932879837046, 0.2538452153618917, 0.26778024023833746, 0.24287521560140046],
         [-9.999999989112965e+35, -1.0000000106235685e+36, -1.0000000160291218e+36, -1.0000000160291218e+36],
         [4.489892507421543e+30, 8.080783955189661e+30, 1.1175380700487687e+25, 1.8943480107498003e+29])]), 4),
    "narrow beside wide": (other.Problem([0.5, 0.5], [   # distances to the far mean must not enter the near levels
        ([0.9, 0.1], [1.0, 30.0], [1e-6, 2.0]), ([0.5, 0.5], [-30.0, 40.0], [20.0, 1.0])]), 4),
    "close pairs": (other.Problem([0.5, 0.5], [one(0.0, 1.0), ([0.5, 0.5], [-1.0, 1.0], [1e-4, 1e-4])]), 4),
    "equal densities, other priors": (other.Problem([0.3, 0.7], [([0.5, 0.5], [0.0, 1.0], [1.0, 2.0])] * 2), 0),
    "a prior of 0": (other.Problem([0.5, 0.0, 0.5], [one(0.0, 1.0), one(0.5, 1e-3), one(1.0, 2.0)]), 2),
    "priors of 1e-300": (other.Problem([1e-300, 1.0], [one(5.0, 1.0), one(0.0, 1.0)]), 1),
    "five states": (other.Problem([0.2] * 5, [one(float(k), 0.1 + 0.05 * k) for k in range(5)]), 8),
    "costs of three states": (other.Problem([0.2, 0.5, 0.3], [
        ([0.9, 0.1], [0.0, 1.0], [0.5, 3.0]), ([0.5, 0.5], [1.0, 2.5], [0.3, 0.2]), one(4.0, 1.0)],
        np.array([[0.0, 1.0, 40.0], [3.0, 0.0, 1.0], [1.0, 7.0, 0.0], [0.4, 0.4, 0.4]])), None),
}


@pytest.mark.parametrize("name", HARD)
def test_hard_cases(name):
    problem, count = HARD[name]
    found = assert_found(problem)
    assert count is None or found == count == len(problem.rule().levels)


@pytest.mark.parametrize("excess, count", [(1e-3, 2), (1e-9, 2), (-1e-9, 0), (-1e-3, 0)])
def test_pairs_that_nearly_touch(excess, count):
    """A wide and a narrow Gaussian whose peaks differ by a factor of 1 + excess."""
    prior = (1 + excess) / (3 + 1 + excess)
    problem = other.Problem([1 - prior, prior], [one(0.0, 3.0), one(0.0, 1.0)])
    assert assert_found(problem) == count


@pytest.mark.parametrize("family, power", [(lm.gaussian, 2), (lm.laplace, 1)])
def test_scales_far_apart_keep_all_digits(family, power):
    """Around one centre: x^n / n (s^-n - S^-n) = log(S / s), at 50 digits. The slope there is steep: the roots lose a
    few units in the last place, nothing more."""
    near, far = 1e-9, 50.0
    spike, flat, elsewhere = family(0.0, near), family(0.0, far), family(1e6, 1.0)
    alone = lm.States({"spike": spike, "flat": flat}), lm.States({"flat": flat, "spike": spike})
    within = [lm.States({"spike": lm.mixture([1, share], [spike, elsewhere]),
                         "flat": lm.mixture([1, 1e-17 - share], [flat, elsewhere])}) for share in (0.0, 1e-17)]
    found = [lm.bayes(states).levels for states in (*alone, *within)]
    with mpmath.workdps(50):
        s, t = mpmath.mpf(near), mpmath.mpf(far)
        level = float((power * mpmath.log(t / s) / (s**-power - t**-power)) ** (mpmath.mpf(1) / power))
    for levels in found:
        assert levels[np.abs(levels) < 1].tolist() == pytest.approx([-level, level], rel=4e-15)


@pytest.mark.parametrize("mean", [1e9, 2.0**60])
@pytest.mark.parametrize("beside", [[], [lm.gaussian(-5.0, 1.0)]], ids=["a pair", "a mixture"])
def test_a_law_narrower_than_the_spacing_of_doubles_has_its_one_reading(mean, beside):
    parts = [lm.gaussian(mean, 1e-8), *beside]
    spike = lm.mixture([1 / len(parts)] * len(parts), parts)
    states = lm.States({"wide": lm.gaussian(0.9 * mean, mean), "spike": spike})
    rule = lm.bayes(states)
    near = [np.nextafter(mean, 0), mean, np.nextafter(mean, np.inf)]
    assert rule(near).tolist() == [0, 1, 0]
    assert rule.levels[-2:].tolist() == near[1:]


def test_equal_laws_leave_no_gap_to_search():
    """Equal states tie everywhere, and the lower index decides; a law that two states share drops out of their gap."""
    law = lm.mixture([0.3, 0.7], [lm.gaussian(0.0, 1.0), lm.laplace(1.0, 2.0)])
    rule = lm.bayes(lm.States({"a": law, "b": law}))
    assert (rule.levels.tolist(), rule.decisions.tolist(), rule.search) == ([], [0], "exhaustive")
    dark = lm.gaussian(0.0, 1e3)     # 0.5 * 0.6 = 0.3 on both sides, but for its rounding
    low, high = lm.gaussian(-1.0, 0.1), lm.gaussian(2.0, 0.1)
    rule = lm.bayes(lm.States({"a": lm.mixture([0.6, 0.4], [dark, low]), "b": lm.mixture([0.4, 0.6], [high, dark])}))
    assert rule.levels.tolist() == pytest.approx([0.5], rel=1e-15)
    assert rule.search == "exhaustive"


@pytest.mark.parametrize("apart", [3.0, 12.0, 37.7, 75.5, 150.0, 271.3])
@pytest.mark.parametrize("sd, prior", [(1.0, 0.5), (0.6, 1e-6), (1.7, 0.99)])
def test_error_rates_down_to_1e_minus_4000(apart, sd, prior):
    """log10 of the error rate, and of each entry, of the rule as found: its tails at 50 digits, to 1e-10."""
    laws = {"low": lm.gaussian(0.25, 1.0), "high": lm.gaussian(0.25 + apart, sd)}
    states = lm.States(laws, priors=[prior, 1 - prior])
    rule = lm.bayes(states)
    assessed = rule.assess(states)
    with mpmath.workdps(50):
        edges = [-mpmath.inf, *map(mpmath.mpf, rule.levels.tolist()), mpmath.inf]

        def log10_probability(decision, mean, scale):
            total = mpmath.mpf(0)
            for low, high, decided in zip(edges, edges[1:], rule.decisions):
                if decided == decision:     # the difference of the smaller tails
                    a, b = ((edge - mpmath.mpf(mean)) / mpmath.mpf(scale) / mpmath.sqrt(2) for edge in (low, high))
                    a, b = (-b, -a) if b < 0 else (a, b)
                    total += (mpmath.erfc(a) - mpmath.erfc(b)) / 2
            return mpmath.log10(total)

        wanted = [[log10_probability(d, m, s) for m, s in ((0.25, 1.0), (0.25 + apart, sd))] for d in (0, 1)]
        rate = mpmath.log10(mpmath.mpf(prior) * 10 ** wanted[1][0] + (1 - mpmath.mpf(prior)) * 10 ** wanted[0][1])
    assert assessed.log10_error_rate == pytest.approx(float(rate), abs=1e-10)
    np.testing.assert_allclose(assessed.log10_transition, np.array(wanted, float), atol=1e-10, rtol=0)
    assert (apart, sd, prior) != (271.3, 1.0, 0.5) or rate < -3990
