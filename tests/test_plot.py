"""Pictures: what is drawn is what the rule and the densities say, on the Axes given, and nothing else changes."""

import numpy as np
import pytest

import limen as lm

matplotlib = pytest.importorskip("matplotlib")
matplotlib.use("Agg")
from matplotlib import pyplot  # noqa: E402


@pytest.fixture(autouse=True)
def close_figures():
    yield
    pyplot.close("all")


@pytest.fixture
def ax():
    return pyplot.figure().add_subplot()


@pytest.fixture
def states():
    cap = lm.mixture([0.9, 0.1], [lm.gaussian(1.3, 0.17), lm.gaussian(1.2, 0.6)])
    return lm.States({"empty": lm.gaussian(0.8, 0.13), "<cap>": cap}, priors=[0.31, 0.69])


def polygon_area(collection):
    """Area of the filled polygons, by the shoelace formula."""
    area = 0.0
    for path in collection.get_paths():
        x, y = path.vertices.T
        area += 0.5 * abs(np.dot(x, np.roll(y, 1)) - np.dot(y, np.roll(x, 1)))
    return area


def test_shaded_area_is_the_error_rate(ax, states):
    """Trapezoids at 800 steps and 800 quantiles: 1e-3 holds; the span leaves out less than that of each tail."""
    rule = lm.bayes(states)
    lm.plot.rule(rule, states, span=(-30, 30), ax=ax)
    assert sum(map(polygon_area, ax.collections)) == pytest.approx(rule.assess(states).error_rate, rel=2e-3)


def test_levels_stand_where_the_rule_has_them(ax, states):
    rule = lm.bayes(states)
    lm.plot.rule(rule, states, span=(-30, 30), ax=ax)
    drawn = sorted(line.get_xdata()[0] for line in ax.lines if line.get_linestyle() == "--")
    assert drawn == rule.levels.tolist()


def test_levels_outside_are_told(ax, states):
    rule = lm.bayes(states)
    lm.plot.rule(rule, states, span=(5, 6), ax=ax)
    assert any("levels lie outside" in text.get_text() for text in ax.texts)


def test_curve_is_the_weighted_density_and_meets_its_peak(ax):
    """A spike of a millionth of the span is met at its own quantiles; the top of the curve is its mode within 1e-4."""
    spike = lm.States({"wide": lm.gaussian(0.0, 1.0), "spike": lm.gaussian(0.3, 1e-6)}, priors=[0.5, 0.5])
    lm.plot.densities(spike, ax=ax)
    curve = ax.lines[1]
    assert curve.get_ydata().max() == pytest.approx(0.5 * spike.densities[1].pdf(0.3), rel=1e-4)


def test_counts_are_drawn_at_integers(ax):
    lm.plot.densities(lm.States({"dark": lm.poisson(3.2), "lit": lm.poisson(11.7)}, priors=[0.5, 0.5]), ax=ax)
    for line in ax.lines:
        x = np.asarray(line.get_xdata())
        assert x.size > 5 and np.array_equal(x, np.round(x))


def test_fit_shows_both_tails_as_counted(ax):
    lm.plot.fit(lm.gaussian(0.0, 1.0), [-1.5, -0.25, -0.25, 0.75, float("nan")], ax=ax)
    points = dict(zip(*ax.lines[0].get_data()))
    assert points == pytest.approx({-1.5: np.log10(1 / 4), -0.25: np.log10(3 / 4), 0.75: np.log10(1 / 4)})


def test_tally_without_truth_is_bars(ax):
    lm.plot.tally([12, 30, 5], names=["a", "b", "undecided"], ax=ax)
    assert [bar.get_width() for bar in ax.patches] == [12, 30, 5]


@pytest.mark.parametrize("draw", ["densities", "rule", "fit", "tally"])
def test_draws_on_the_current_axes_and_leaves_settings_alone(draw, states):
    before, current = dict(matplotlib.rcParams), pyplot.figure().add_subplot()
    pyplot.sca(current)
    arguments = {
        "densities": (states,), "rule": (lm.bayes(states), states),
        "fit": (states.densities[0], [0.7, 0.9]), "tally": ([[3, 1], [2, 4]],),
    }[draw]
    assert getattr(lm.plot, draw)(*arguments) is current
    assert dict(matplotlib.rcParams) == before
    assert len(pyplot.get_fignums()) == 1


@pytest.mark.parametrize("span", [(1.0, 1.0), (2.0, 1.0), (0.0, float("inf")), (float("nan"), 1.0)])
def test_span_must_be_finite_and_in_order(span, states, ax):
    with pytest.raises(ValueError, match="span is .* expected two finite readings in growing order"):
        lm.plot.densities(states, span=span, ax=ax)


def test_fit_of_no_reading_is_refused(ax):
    with pytest.raises(ValueError, match="readings holds no number"):
        lm.plot.fit(lm.gaussian(0.0, 1.0), [float("nan")], ax=ax)
