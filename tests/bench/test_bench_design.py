"""How long a design takes from Python. Nothing is asserted: `bash tests/run bench` prints the table."""

import numpy as np
import pytest

import limen as lm

pytest.importorskip("pytest_benchmark")


def two_gaussians():
    return lm.States({"empty": lm.gaussian(0.8, 0.05), "cap": lm.gaussian(1.3, 0.07)}, priors=[0.02, 0.98])


def two_mixtures():
    left = lm.mixture([0.7, 0.2, 0.1], [lm.gaussian(0.0, 1.0), lm.gaussian(0.5, 2.5), lm.gaussian(-1.0, 0.3)])
    right = lm.mixture([0.6, 0.3, 0.1], [lm.gaussian(3.0, 1.2), lm.gaussian(2.0, 3.1), lm.gaussian(4.1, 0.2)])
    return lm.States({"left": left, "right": right}, priors=[0.4, 0.6])


def eight_levels():
    return lm.States({f"level {k}": lm.gaussian(k, 0.1 + 0.01 * k) for k in range(8)}, priors=np.full(8, 1 / 8))


@pytest.mark.parametrize("make", [two_gaussians, two_mixtures, eight_levels], ids=lambda make: make.__name__)
def test_bayes(benchmark, make):
    benchmark(lm.bayes, make())


@pytest.mark.parametrize("make", [two_gaussians, two_mixtures, eight_levels], ids=lambda make: make.__name__)
def test_assess(benchmark, make):
    states = make()
    rule = lm.bayes(states)
    benchmark(rule.assess, states)


def test_construct_a_density(benchmark):
    benchmark(lm.gaussian, 0.8, 0.05)


def test_construct_states(benchmark):
    densities = {"empty": lm.gaussian(0.8, 0.05), "cap": lm.gaussian(1.3, 0.07)}
    benchmark(lm.States, densities, priors=[0.02, 0.98])


def test_logpdf_of_one_reading(benchmark):
    benchmark(lm.gaussian(0.8, 0.05).logpdf, 0.93)


def test_logpdf_of_a_million_readings(benchmark):
    x = np.linspace(-1.0, 3.0, 1_000_000)
    benchmark(lm.gaussian(0.8, 0.05).logpdf, x)


def test_logpdf_of_a_million_readings_by_numpy(benchmark):
    """The yardstick: the formula written out."""
    x = np.linspace(-1.0, 3.0, 1_000_000)
    benchmark(lambda: -0.5 * ((x - 0.8) / 0.05) ** 2 - np.log(0.05) - 0.5 * np.log(2 * np.pi))


def test_decide_one_reading(benchmark):
    benchmark(lm.bayes(two_gaussians()), 0.93)
