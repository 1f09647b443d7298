"""Exact bounds of rates, against SciPy's beta quantiles and closed forms."""

import math

import pytest
from scipy.stats import beta

import limen as lm

CASES = [(3, 1000), (1, 5), (4, 5), (2, 3), (21_437, 250_000), (8, 10**9), (999, 1000), (137, 138), (30, 94_951)]


@pytest.mark.parametrize("confidence", [0.5, 0.95, 0.999])
@pytest.mark.parametrize(("errors", "trials"), CASES)
def test_bounds_are_the_beta_quantiles(errors, trials, confidence):
    """Clopper-Pearson by SciPy's beta quantiles, which hold 1e-11 or so here; both sides."""
    share = (1 - confidence) / 2
    wanted = beta.ppf(share, errors, trials - errors + 1), beta.isf(share, errors + 1, trials - errors)
    assert lm.error_bounds(errors, trials, confidence) == pytest.approx(wanted, rel=1e-10)


@pytest.mark.parametrize("trials", [1, 7, 10**6, 10**15, 2**53])
def test_none_and_all_have_closed_forms(trials):
    """No errors: 1 - (alpha / 2) ** (1 / n); all errors mirror it."""
    log_share = math.log(0.025)
    assert lm.error_bounds(0, trials) == (0.0, pytest.approx(-math.expm1(log_share / trials), rel=1e-13))
    assert lm.error_bounds(trials, trials) == (pytest.approx(math.exp(log_share / trials), rel=1e-13), 1.0)


@pytest.mark.parametrize("trials", [10**6, 10**12, 10**15, 2**53])
def test_one_error_has_a_closed_form_below(trials):
    """P(K >= 1) = 1 - (1 - p) ** n; the bound holds 1e-13 however rare the error is."""
    assert lm.error_bounds(1, trials)[0] == pytest.approx(-math.expm1(math.log1p(-0.025) / trials), rel=1e-13)


def test_bounds_of_many_errors_are_as_exact():
    """A million errors in a billion: mpmath's binomial tail at both bounds, 30 digits, gives the share back."""
    import mpmath

    errors, trials = 10**6, 10**9
    low, high = lm.error_bounds(errors, trials)
    with mpmath.workdps(30):
        for rate, first in ((low, errors), (high, errors + 1)):
            # P(K >= first): its first term times the sum of the ratios, term by term.
            rate, term, total = mpmath.mpf(rate), mpmath.mpf(1), mpmath.mpf(1)
            if rate < mpmath.mpf(errors) / trials:
                steps = ((trials - first - i) / mpmath.mpf(first + i + 1) * rate / (1 - rate) for i in range(10**5))
                edge = first
            else:
                steps = ((first - 1 - i) / mpmath.mpf(trials - first + 2 + i) * (1 - rate) / rate for i in range(10**5))
                edge = first - 1
            for step in steps:
                term *= step
                total += term
                if term < total * mpmath.mpf("1e-25"):
                    break
            log_edge = (mpmath.loggamma(trials + 1) - mpmath.loggamma(edge + 1) - mpmath.loggamma(trials - edge + 1)
                        + edge * mpmath.log(rate) + (trials - edge) * mpmath.log1p(-rate))
            # A relative error e of the rate is one of about 2000 e in the tail.
            assert float(mpmath.exp(log_edge) * total) == pytest.approx(0.025, rel=1e-9)
