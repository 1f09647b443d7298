"""The density fitted to readings: real recordings, known laws, awkward samples, and its own arithmetic at 40 digits."""

import pickle
from pathlib import Path

import mpmath
import numpy as np
import pytest
from scipy import stats

import limen as lm
from limen import _core

CAPTURES = Path(__file__).resolve().parent.parent / "notebooks" / "captures"
REFERENCE = Path(__file__).resolve().parent / "reference"


def parts(d):
    """Knots, log densities, slopes, tail scales, tail shapes and (readings, tail readings, errors, step)."""
    return d._recipe[1:]


def step_of(d):
    return parts(d)[5][3]


# --- real recordings: skewed, heavy-tailed, on a lattice of 26 ticks ------------------------------------------------
@pytest.fixture(scope="module", params=["latency_two", "latency_four"])
def recording(request):
    with np.load(CAPTURES / f"{request.param}.npz") as capture:
        readings, state = capture["readings"], capture["state"]
    even = np.arange(len(readings)) // 1000 % 2 == 0
    count = np.bincount(state[even])
    laws = {str(k): lm.from_readings(readings[even & (state == k)]) for k in range(len(count))}
    return lm.States(laws, priors=count / count.sum()), readings[~even], state[~even]


def test_recordings_keep_accuracy_and_lose_raggedness(recording):
    """Measured within 3 % of the Bayes rule of the counted readings' own histogram, predicted within 10 % of measured,
    and no more levels than crossings of smooth curves and of their tails give."""
    states, readings, truth = recording
    rule = lm.bayes(states)
    measured = np.mean(rule(readings) != truth)
    values, index = np.unique(readings, return_inverse=True)
    counts = np.zeros((len(values), len(states.names)))
    np.add.at(counts, (index, truth), 1)
    floor = 1 - counts.max(axis=1).sum() / len(readings)
    assert floor <= measured < 1.03 * floor
    assert abs(rule.assess(states).error_rate / measured - 1) < 0.1
    assert len(rule.levels) <= 6
    assert rule.search.startswith("exhaustive")


def test_recordings_show_their_lattice(recording):
    states, *_ = recording
    for d in states.densities:
        assert step_of(d) == 26
        assert "lattice of 26" in d.fit_notes
        assert np.all((np.array(parts(d)[0]) - 13) % 26 == 0)     # knots stand on edges of cells
        assert len(parts(d)[0]) <= 40


# --- known laws -----------------------------------------------------------------------------------------------------
LAWS = {
    "normal": stats.norm(),
    "student t": stats.t(3),
    "cauchy": stats.cauchy(),
    "exponential": stats.expon(),
    "gamma": stats.gamma(2.2),
    "gumbel": stats.gumbel_r(),
    "laplace": stats.laplace(),
    "lognormal": stats.lognorm(1.3),
    "uniform": stats.uniform(),
}


@pytest.mark.parametrize("n", [200, 2000, 50000])
@pytest.mark.parametrize("name", LAWS)
def test_known_laws_come_out_near(name, n):
    """The mean log likelihood lost to the truth, times n, is half the number of parameters for a fit by likelihood.
    Here it is 5 to 50, most where a density ends in a jump, which a law without ends can only approach; 150 is three
    times the most that was seen in 20 samples each. Modes beyond the true one are kinks at a threshold."""
    law = LAWS[name]
    d = lm.from_readings(law.rvs(n, random_state=n + 7))
    fresh = law.rvs(20000, random_state=11)
    assert n * np.mean(law.logpdf(fresh) - d.logpdf(fresh)) < 150
    grid = law.ppf(np.linspace(0.001, 0.999, 3001))
    change = np.diff(d.logpdf(grid))
    change = change[np.abs(change) > 1e-9]
    assert np.sum((change[:-1] > 0) & (change[1:] < 0)) <= 4
    assert len(parts(d)[0]) <= 12


@pytest.mark.parametrize("apart, sd, share", [(4, 1, 0.5), (8, 0.1, 0.9), (1000, 1, 0.5)])
def test_two_humps_stay_two(apart, sd, share):
    random = np.random.default_rng(3)
    n = 20000
    readings = np.where(random.random(n) < share, random.normal(0, 1, n), random.normal(apart, sd, n))
    d = lm.from_readings(readings)
    truth = lm.mixture([share, 1 - share], [lm.gaussian(0, 1), lm.gaussian(apart, sd)])
    probabilities = np.linspace(0.002, 0.998, 4001)
    grid = np.array([truth.ppf(p) for p in probabilities])
    change = np.diff(d.logpdf(grid))
    assert np.sum((change[:-1] > 0) & (change[1:] < 0)) == 2
    assert n * np.mean(truth.logpdf(readings) - d.logpdf(readings)) < 100
    assert d.logpdf(apart / 2 + 1e-6) < d.logpdf(0) - 1


def test_rounding_to_a_lattice_changes_little():
    """A normal law read in steps of 0.25 sd: smoothing over half a step adds step^2 / 12 to the variance."""
    readings = np.random.default_rng(5).normal(0, 1, 100_000)
    d = lm.from_readings(np.round(readings / 0.25) * 0.25)
    assert step_of(d) == 0.25
    assert d.var == pytest.approx(1 + 2 * 0.25**2 / 12, rel=0.02)  # 0.02: 4 standard errors of a sample variance
    x = np.linspace(-3, 3, 601)
    assert np.abs(d.logpdf(x) - stats.norm.logpdf(x)).max() < 0.15


# --- lattices -------------------------------------------------------------------------------------------------------
@pytest.mark.parametrize("step", [26.0, 1.0, 0.1, 5 / 4095, 2.0**-12])
def test_the_step_of_a_converter_is_found(step):
    readings = np.round(np.random.default_rng(6).normal(900, 12, 20000)) * step
    assert step_of(lm.from_readings(readings)) == pytest.approx(step, rel=1e-9)
    assert step_of(lm.from_readings(np.append(readings, 1e300))) == pytest.approx(step, rel=1e-9)
    assert step_of(lm.from_readings(readings.astype(np.float32))) == pytest.approx(step, rel=1e-4)


def test_no_step_where_there_is_none():
    assert step_of(lm.from_readings(np.random.default_rng(7).normal(0, 1, 20000))) == 0


@pytest.mark.parametrize("dtype", [np.int8, np.uint8, np.int16, np.uint16, np.int32, np.int64, np.float32, np.float64])
def test_every_type_of_reading(dtype):
    codes = np.round(np.random.default_rng(8).normal(60, 9, 5000)).astype(dtype)
    assert lm.from_readings(codes) == lm.from_readings(codes.astype(float))


# --- awkward samples ------------------------------------------------------------------------------------------------
BELL = np.random.default_rng(9).normal(0, 1, 10_000)


@pytest.mark.parametrize("readings", [
    pytest.param(np.append(BELL, 1e300), id="one far outlier"),
    pytest.param(np.append(BELL[:100], [1e300, -1e306]), id="two far outliers"),
    pytest.param(BELL * 1e300, id="huge"),
    pytest.param(BELL * 1e-290, id="tiny"),
    pytest.param(-np.abs(BELL) - 100, id="negative"),
    pytest.param(1e9 + BELL, id="far from 0"),
    pytest.param(np.round(BELL * 0.4), id="quieter than a step"),
    pytest.param(np.repeat([0.0, 1.0, 2.0], [2, 1000, 3]), id="three values"),
    pytest.param(BELL[:20], id="twenty"),
    pytest.param(10 ** (20 * BELL), id="many decades"),
    pytest.param(np.sin(np.linspace(0, 100, 10_000)), id="piled up at both ends"),
    pytest.param(np.arange(1000.0), id="ramp"),
])
def test_awkward_samples_give_a_law(readings):
    """Its probabilities add up, its logarithms are finite, and its quantiles come back."""
    d = lm.from_readings(readings)
    assert np.isfinite(d.logpdf(readings)).all()
    middle = np.quantile(readings, [0.02, 0.3, 0.5, 0.7, 0.98])
    np.testing.assert_allclose(d.cdf(middle) + d.sf(middle), 1, rtol=1e-13)   # two sums from opposite ends
    probabilities = np.array([1e-9, 0.01, 0.4, 0.5, 0.9])
    np.testing.assert_allclose(d.cdf(d.ppf(probabilities)), probabilities, rtol=1e-6)  # the reading itself rounds
    np.testing.assert_allclose(d.sf(d.isf(probabilities)), probabilities, rtol=1e-6)


def test_an_outlier_leaves_the_body_alone():
    """Thresholds may move, and with them the density by what 10,000 readings leave open: 0.1 at 2 sd is two errors."""
    calm, wild = lm.from_readings(BELL), lm.from_readings(np.append(BELL, 1e300))
    x = np.linspace(-2, 2, 201)
    assert np.abs(calm.logpdf(x) - wild.logpdf(x)).max() < 0.1
    assert wild.sf(1e6) < 0.004                                              # one reading in 10,001 was there
    assert wild.mean == np.inf


@pytest.mark.parametrize("readings, says", [
    pytest.param([1.0, 2.0, 3.0], "at least 20", id="three"),
    pytest.param([4.0] * 100, "3 distinct", id="all equal"),
    pytest.param([4.0, 5.0] * 50, "3 distinct", id="two values"),
    pytest.param([*BELL[:50], np.nan], "finite", id="nan"),
    pytest.param([*BELL[:50], -np.inf], "finite", id="infinite"),
    pytest.param(1 + np.arange(100) % 8 * 2.0**-52, "doubles round", id="neighbouring doubles"),
    pytest.param(10.0 ** np.linspace(-300, 300, 100), "powers of ten", id="600 decades"),
    pytest.param(BELL.reshape(100, 100), "shape", id="matrix"),
    pytest.param(BELL + 1j, "real numbers", id="complex"),
])
def test_refusals_name_the_argument(readings, says):
    with pytest.raises(ValueError, match="readings") as refusal:
        lm.from_readings(readings)
    assert says in str(refusal.value)


def test_order_does_not_matter():
    assert lm.from_readings(BELL) == lm.from_readings(np.sort(BELL)[::-1]) == lm.from_readings(BELL.tolist())


def test_it_travels():
    d = lm.from_readings(BELL[:500])
    for copy in (pickle.loads(pickle.dumps(d)), lm.density(d.to_dict())):
        assert copy == d and hash(copy) == hash(d) and copy.fit_notes == d.fit_notes
        assert (copy.logpdf(BELL) == d.logpdf(BELL)).all()
    broken = d.to_dict()
    broken["knots"] = broken["knots"][::-1]
    with pytest.raises(ValueError, match="knots"):
        lm.density(broken)
    assert lm.gaussian(0, 1).fit_notes == ""


# --- its arithmetic at 40 digits ------------------------------------------------------------------------------------
def exact(d):
    """log cdf and log sf of the law that the recipe describes, by mpmath's quadrature of its cubics."""
    knots, values, slopes, scales, shapes = ([mpmath.mpf(v) for v in part] for part in parts(d)[:5])

    def piece(i, low, high):
        h, rise = knots[i + 1] - knots[i], values[i + 1] - values[i]
        a, b = h * slopes[i], h * slopes[i + 1]

        def density(x):
            t = (x - knots[i]) / h
            return mpmath.exp(values[i] + t * (a + t * (3 * rise - 2 * a - b + t * (a + b - 2 * rise))))

        return mpmath.quad(density, mpmath.linspace(low, high, 9))

    masses = [piece(i, knots[i], knots[i + 1]) for i in range(len(knots) - 1)]
    tails = [mpmath.exp(values[0]) * scales[0], mpmath.exp(values[-1]) * scales[1]]
    total = tails[0] + sum(masses) + tails[1]

    def beyond(side, excess):
        scale, shape = scales[side], shapes[side]
        if shape == 0:
            return tails[side] * mpmath.exp(-excess / scale)
        return tails[side] * (1 + shape * excess / scale) ** (-1 / shape)

    def both(x):
        x = mpmath.mpf(x)
        if x <= knots[0]:
            below = beyond(0, knots[0] - x)
            return mpmath.log(below / total), mpmath.log1p(-below / total)
        if x >= knots[-1]:
            above = beyond(1, x - knots[-1])
            return mpmath.log1p(-above / total), mpmath.log(above / total)
        i = max(k for k, knot in enumerate(knots) if knot <= x)
        below = tails[0] + sum(masses[:i]) + piece(i, knots[i], x)
        above = piece(i, x, knots[i + 1]) + sum(masses[i + 1:]) + tails[1]
        return mpmath.log(below / total), mpmath.log(above / total)

    return both


@pytest.mark.parametrize("readings", [
    pytest.param(BELL[:2000], id="bell"),
    pytest.param(np.round(np.random.default_rng(10).standard_t(2, 3000) * 5), id="heavy, on a lattice"),
    pytest.param(np.append(BELL[:900], 1000 + BELL[900:1000]), id="with a gap"),
])
def test_probabilities_against_40_digits(readings):
    """The contract of every family: 1e-13 of the logarithm, or 1e-15 where it is near 0."""
    d = lm.from_readings(readings)
    knots = np.array(parts(d)[0])
    away = np.array([0.7, 30, 1e4])
    x = np.concatenate([knots, 0.37 * knots[1:] + 0.63 * knots[:-1], knots[0] - away, knots[-1] + away])
    with mpmath.workdps(40):
        both = exact(d)
        for at in x:
            for got, wanted in zip((d.logcdf(at), d.logsf(at)), both(at)):
                assert abs(got - wanted) <= max(1e-13 * abs(wanted), 1e-15), at


def test_tails_are_generalized_pareto():
    """Beyond a threshold the law is SciPy's genpareto, times the mass that is there."""
    d = lm.from_readings(np.random.default_rng(12).standard_t(3, 20000))
    knots, values, _, scales, shapes, _ = parts(d)
    excess = np.array([0.3, 2.7, 31.0, 1e5])
    mass = np.log(d.sf(knots[-1]))
    above = stats.genpareto(shapes[1], scale=scales[1])
    np.testing.assert_allclose(d.logsf(knots[-1] + excess), above.logsf(excess) + mass, rtol=1e-12)
    np.testing.assert_allclose(d.logpdf(knots[-1] + excess), above.logpdf(excess) + mass, rtol=1e-12)
    assert 0.15 < shapes[0] < 0.55 and 0.15 < shapes[1] < 0.55                # 1/3, and four standard errors


@pytest.mark.parametrize("shape", [0.05, 0.3, 1.2])
def test_tail_alone_is_the_likeliest(shape):
    """Against SciPy's own search for the maximum, which stops at about 1e-4."""
    readings = 5 + stats.genpareto(shape, scale=2).rvs(800, random_state=13)
    count, scale, found, scale_error, shape_error, likelihood = _core.pareto_tail(readings, 5.0)
    theirs = stats.genpareto.fit(readings - 5, floc=0)
    assert count == 800
    assert (found, scale) == pytest.approx((theirs[0], theirs[2]), rel=2e-3, abs=2e-4)
    assert likelihood == pytest.approx(stats.genpareto.logpdf(readings - 5, found, scale=scale).sum(), rel=1e-12)
    assert likelihood >= stats.genpareto.logpdf(readings - 5, theirs[0], scale=theirs[2]).sum() - 1e-9
    assert shape_error == pytest.approx((1 + shape) / np.sqrt(800), rel=0.15)    # R. L. Smith 1987, large samples
    assert scale_error == pytest.approx(scale * np.sqrt(2 * (1 + shape) / 800), rel=0.15)


def test_tail_alone_refuses():
    with pytest.raises(ValueError, match="threshold"):
        _core.pareto_tail(BELL, 1e9)
    with pytest.raises(ValueError, match="finite"):
        _core.pareto_tail([1.0, np.nan], 0.0)


@pytest.mark.parametrize("threshold, count, shape, scale, likelihood, shape_error, scale_error", [
    (10.0, 109, 0.496985802366719, 6.97546804807505, -374.892990232352, 0.13628382, 1.1134906),
    (20.0, 36, 0.684152180483332, 9.63513283824253, -142.184457695025, None, None),
])
def test_danish_fire_losses(threshold, count, shape, scale, likelihood, shape_error, scale_error):
    """A. J. McNeil, ASTIN Bull. 27 (1997), prints shape 0.50 and scale 6.98 above 10, 0.68 and 9.63 above 20 (from
    memory); the digits here are an independent maximum of the same likelihood, found to about 1e-9."""
    losses = np.loadtxt(REFERENCE / "danish_fire_losses.csv")
    tail = _core.pareto_tail(losses, threshold)
    assert tail[0] == count
    assert tail[1:3] == pytest.approx((scale, shape), rel=1e-9)
    assert tail[5] == pytest.approx(likelihood, rel=1e-9)
    if shape_error is not None:
        assert tail[3:5] == pytest.approx((scale_error, shape_error), rel=1e-6)


def test_danish_quantile():
    """McNeil 1997 prints 94.3 for the 0.999 quantile of all 2167 losses, from the tail above 10 (from memory)."""
    _, scale, shape, *_ = _core.pareto_tail(np.loadtxt(REFERENCE / "danish_fire_losses.csv"), 10.0)
    for p, quantile in ((0.99, 27.2899874004874), (0.999, 94.3393520570714), (0.9999, 304.901581023123)):
        assert 10 + scale / shape * ((109 / 2167 / (1 - p)) ** shape - 1) == pytest.approx(quantile, rel=1e-8)
