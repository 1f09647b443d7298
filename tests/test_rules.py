"""Rules end to end: levels against closed forms and mpmath, decisions against scikit-learn, saving, C headers."""

import ctypes
import pickle
import shutil
import subprocess

import mpmath
import numpy as np
import pytest

import limen as lm


def quadratic_levels(mean_a, sd_a, prior_a, mean_b, sd_b, prior_b):
    """Where two weighted Gaussians meet, at 50 digits."""
    with mpmath.workdps(50):
        m, s, p = [[mpmath.mpf(v) for v in pair] for pair in ((mean_a, mean_b), (sd_a, sd_b), (prior_a, prior_b))]
        a = 1 / (2 * s[1] ** 2) - 1 / (2 * s[0] ** 2)
        b = m[0] / s[0] ** 2 - m[1] / s[1] ** 2
        c = m[1] ** 2 / (2 * s[1] ** 2) - m[0] ** 2 / (2 * s[0] ** 2) + mpmath.log(p[0] * s[1] / (p[1] * s[0]))
        if a == 0:
            return [float(-c / b)]
        root = mpmath.sqrt(b * b - 4 * a * c)
        return sorted(float((-b + sign * root) / (2 * a)) for sign in (-1, 1))


PAIRS = [
    (0.8, 0.05, 0.02, 1.3, 0.07, 0.98),
    (0.0, 1.0, 0.5, 1.0, 1.0 + 1e-10, 0.5),    # one level near 0.5, one near -1e10
    (-3.7, 2.0, 0.25, 1.9, 2.0, 0.75),
    (0.0, 1e-6, 0.5, 0.0, 1e2, 0.5),
]


@pytest.mark.parametrize("pair", PAIRS, ids=str)
def test_levels_of_two_gaussians(pair):
    """Relative 1e-11: the far level of the second pair rests on a difference of sds of 1e-10, itself known to 1e-16 of
    1, so the parameters as rounded are what mpmath is given too."""
    mean_a, sd_a, prior_a, mean_b, sd_b, prior_b = pair
    states = lm.States({"a": lm.gaussian(mean_a, sd_a), "b": lm.gaussian(mean_b, sd_b)}, priors=[prior_a, prior_b])
    rule = lm.bayes(states)
    assert rule.levels.tolist() == pytest.approx(quadratic_levels(*pair), rel=1e-11)
    assert rule.search == "exhaustive"


def test_error_rate_far_below_the_smallest_double():
    """Two Gaussians 2 * 134 sds apart: log10 of the tail at 134 by mpmath, to 1e-10 as the design asks."""
    states = lm.States({"low": lm.gaussian(0.0, 1.0), "high": lm.gaussian(268.0, 1.0)})
    with mpmath.workdps(50):
        wanted = float(mpmath.log10(mpmath.erfc(134 / mpmath.sqrt(2)) / 2))
    assert wanted < -3800
    assert lm.bayes(states).assess(states).log10_error_rate == pytest.approx(wanted, abs=1e-10)


def test_decisions_are_those_of_quadratic_discriminant_analysis():
    """scikit-learn's QDA on its breast-cancer readings, one feature at a time: the same decision on every reading.

    Its means, variances and priors are taken over, as versions divide by n or by n - 1.
    """
    datasets = pytest.importorskip("sklearn.datasets")
    from sklearn.discriminant_analysis import QuadraticDiscriminantAnalysis

    readings, truth = datasets.load_breast_cancer(return_X_y=True)
    for feature in (readings / readings.std(axis=0)).T:     # it refuses variances that are small as such
        qda = QuadraticDiscriminantAnalysis(store_covariance=True).fit(feature[:, None], truth)
        states = lm.States({str(k): lm.gaussian(qda.means_[k, 0], np.sqrt(qda.covariance_[k][0, 0])) for k in (0, 1)},
                           priors=qda.priors_)
        assert np.array_equal(lm.bayes(states)(feature), qda.predict(feature[:, None]))


def test_costs_and_an_undecided_row_against_a_plain_search():
    """The cheapest decision at 20,001 readings, from the densities themselves; none may differ."""
    states = lm.States({"open": lm.gaussian(23.1, 0.35), "capped": lm.mixture(
        [0.95, 0.05], [lm.gaussian(19.8, 0.15), lm.gaussian(20.5, 1.1)])}, priors=[0.004, 0.996])
    costs = np.array([[0.0, 1.0], [400.0, 0.0], [3.0, 0.3]])
    rule = lm.bayes(states, costs, decisions=["open", "capped", "undecided"])
    x = np.linspace(10, 35, 20_001)
    with np.errstate(under="ignore"):
        expected = costs @ [p * d.pdf(x) for p, d in zip(states.priors, states.densities)]
    sure = np.diff(np.sort(expected, axis=0)[:2], axis=0)[0] > 1e-12 * expected.max(axis=0)
    assert sure.sum() > 15_000
    assert np.array_equal(rule(x)[sure], expected.argmin(axis=0)[sure])
    assert set(rule.decisions.tolist()) == {0, 1, 2}


def test_transition_matrix_and_risk_against_scipy():
    from scipy.stats import norm

    states = lm.States({"a": lm.gaussian(0.3, 1.1), "b": lm.gaussian(2.9, 0.7)}, priors=[0.35, 0.65])
    rule = lm.rule([0.9, 2.2], [0, 1, 2], ["a", "undecided", "b"])
    costs = np.array([[0.0, 7.0], [0.5, 0.5], [3.0, -1.0]])
    a = rule.assess(states, costs)
    edges = [-np.inf, 0.9, 2.2, np.inf]
    wanted = np.array([np.diff(norm.cdf(edges, m, s)) for m, s in ((0.3, 1.1), (2.9, 0.7))]).T
    np.testing.assert_allclose(a.transition, wanted, rtol=1e-12)     # SciPy's cdf differences lose a few digits
    assert a.error_rate == pytest.approx(0.35 * wanted[2, 0] + 0.65 * wanted[0, 1], rel=1e-12)
    assert a.risk == pytest.approx((costs * wanted) @ [0.35, 0.65] @ np.ones(3), rel=1e-12)


def test_a_narrow_term_far_away_hides_no_level():
    """At -100 the spike of sd 1.6e-5 is 6e6 of its sds away: its rounding is large, its share nil. Against a plain look
    at 4,001 readings, with those left out where the two states are within 1e-9 of each other."""
    wide = lm.mixture([0.9635372060949226, 0.0364598991360757, 2.8947690017e-06],
                      [lm.gaussian(1.4414785048189707, 7.280374591764994),
                       lm.gaussian(4.484616935842494, 19.029626473164214),
                       lm.gaussian(4.504592900250536, 50.88483837183364)])
    spiked = lm.mixture([0.0006574919126513636, 0.961660160635689, 0.03758987411556883, 9.247333609075917e-05],
                        [lm.gaussian(-4.681155159855509, 1.6258467498374467e-05),
                         lm.gaussian(0.03074483073810441, 1.7329369246640754e-06),
                         lm.gaussian(-3.652900728483568, 15.271707251336679),
                         lm.gaussian(-4.488063661312117, 27.56815469388722)])
    states = lm.States({"wide": wide, "spiked": spiked})
    rule = lm.bayes(states)
    x = np.linspace(-140, 140, 4001)
    gap = spiked.logpdf(x) - wide.logpdf(x)
    sure = np.abs(gap) > 1e-9
    assert np.array_equal(rule(x)[sure], (gap > 0)[sure])


@pytest.fixture
def rule():
    return lm.rule([-1.25, 0.1, 3e300], [2, 0, 1, 0], ["empty", "cap", "<odd> */"])


def test_a_rule_survives_files_pickles_and_dicts(rule, tmp_path):
    for again in (rule, rule.with_hysteresis(0.25)):
        again.save(tmp_path / "rule.json")
        assert lm.load(tmp_path / "rule.json") == again == pickle.loads(pickle.dumps(again))
        assert hash(lm.load(tmp_path / "rule.json")) == hash(again)
    assert [path.name for path in tmp_path.iterdir()] == ["rule.json"]


@pytest.mark.skipif(shutil.which("gcc") is None, reason="needs gcc")
@pytest.mark.parametrize("levels", [[], [0.1], [-1.25, 0.1, 3e300]], ids=str)
def test_the_c_header_decides_alike(levels, tmp_path):
    """Compiled with warnings as errors, it gives the codes of the rule on the levels, their neighbours and NaN."""
    rule = lm.rule(levels, [k % 3 for k in range(len(levels) + 1)], ["empty", "cap", "<odd> */"])
    (tmp_path / "line.h").write_text(rule.to_c_header("line"))
    (tmp_path / "line.c").write_text('#include "line.h"\nint decide(double x);\nint decide(double x)'
                                     '{ return line_decide(x); }\n')
    subprocess.run(["gcc", "-std=c99", "-Wall", "-Wextra", "-Wpedantic", "-Werror", "-shared", "-fPIC", "-o",
                    tmp_path / "line.so", tmp_path / "line.c"], check=True)
    decide = ctypes.CDLL(tmp_path / "line.so").decide
    decide.argtypes = [ctypes.c_double]
    x = np.array([*levels, *np.nextafter(levels, -np.inf), *np.nextafter(levels, np.inf), -np.inf, np.inf, np.nan, 0.0])
    assert [decide(value) for value in x] == rule(x).tolist()


def test_states_are_immutable_and_survive_pickles():
    states = lm.States({"a": lm.gaussian(0.3, 1.1), "b": 2.0 * lm.gaussian(1.0, 0.7) + 0.5}, priors=[0.35, 0.65])
    assert pickle.loads(pickle.dumps(states)) == states
    with pytest.raises(AttributeError):
        states.names = ()
    with pytest.raises(ValueError):
        states.priors[0] = 1.0


def test_densities_survive_dicts_and_pickles():
    recorded = lm.from_readings(lm.gaussian(20.0, 3.0).ppf((np.arange(900) + 0.5) / 900))
    for d in (lm.gaussian(0.8, 0.05), lm.mixture([0.25, 0.75], [lm.gaussian(0, 1), -2.0 * lm.gaussian(1, 3) + 1]),
              recorded):
        assert lm.density(d.to_dict()) == d == pickle.loads(pickle.dumps(d))
        x = np.linspace(-5, 40, 11)
        assert np.array_equal(lm.density(d.to_dict()).logpdf(x), d.logpdf(x))
