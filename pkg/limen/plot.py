"""Pictures of states, rules and counts. Each function draws on one Axes and returns it; Matplotlib is loaded late."""

import math

import numpy as np

__all__ = ["densities", "fit", "rule", "tally"]

_EDGE = 1e-3    # the tail of each state that a picture may leave out, where no span is given
_STROKES = 800  # points of a curve; as many again at the quantiles of its density, so that no spike is missed


def densities(states, span=None, log=False, ax=None):
    """Draw the density of each state, weighted with its prior.

    Parameters
    ----------
    states : States
    span : (float, float), optional
        First and last reading shown; by default all but a thousandth of each tail of each state.
    log : bool
        Logarithmic density axis, for what happens in the tails.
    ax : matplotlib.axes.Axes, optional
        Where to draw; by default the current Axes.

    Returns
    -------
    matplotlib.axes.Axes

    Examples
    --------
    >>> states = lm.States({"empty": lm.gaussian(0.8, 0.05), "cap": lm.gaussian(1.3, 0.07)}, priors=[0.02, 0.98])
    >>> ax = lm.plot.densities(states)
    >>> [line.get_label() for line in ax.lines]
    ['empty', 'cap']
    """
    ax = _axes(ax)
    low, high = _span(states.densities, span)
    tallest = 0.0
    for k, (name, density, prior) in enumerate(zip(states.names, states.densities, states.priors)):
        x = _abscissae(density, low, high)
        height = prior * density.pdf(x)
        tallest = max(tallest, np.max(height, initial=0.0))
        marker = {"linestyle": "none", "marker": "o", "markersize": 3} if density.discrete else {}
        ax.plot(x, height, color=f"C{k % 10}", label=name, **marker)
    ax.set_xlim(low, high)
    ax.set_xlabel("reading")
    ax.set_ylabel("prior x density")
    if log and tallest > 0:
        ax.set_yscale("log")
        ax.set_ylim(tallest * 1e-8, tallest * 2)
    else:
        ax.set_ylim(bottom=0)
    ax.legend(frameon=False)
    return ax


def rule(rule, states, span=None, log=False, ax=None):
    """Draw a rule over the states it decides between: densities, levels, decisions and the regions of error.

    The shaded area of a state's colour is the probability that the state occurs and another is declared.

    Parameters
    ----------
    rule : Rule
    states : States
        Need not be those of the rule's design.
    span, log, ax
        As in `lm.plot.densities`.

    Returns
    -------
    matplotlib.axes.Axes

    Examples
    --------
    >>> states = lm.States({"empty": lm.gaussian(0.8, 0.05), "cap": lm.gaussian(1.3, 0.07)}, priors=[0.02, 0.98])
    >>> ax = lm.plot.rule(lm.bayes(states), states, log=True)
    >>> ax.get_yscale()
    'log'
    """
    low, high = _span(states.densities, span)
    ax = densities(states, (low, high), log, ax)
    edges = np.concatenate([[-math.inf], rule.levels, [math.inf]])
    hidden = np.count_nonzero((rule.levels < low) | (rule.levels > high))
    for level in rule.levels[(rule.levels >= low) & (rule.levels <= high)]:
        ax.axvline(level, color="0.3", linewidth=0.8, linestyle="--")
    for k, (density, prior) in enumerate(zip(states.densities, states.priors)):
        for decision, left, right in zip(rule.decisions, edges[:-1], edges[1:]):
            left, right = max(left, low), min(right, high)
            if rule.names[decision] == states.names[k] or left >= right:
                continue
            x = _abscissae(density, left, right)
            if density.discrete:
                x = x[x < right]
                ax.vlines(x, 0, prior * density.pdf(x), color=f"C{k % 10}", alpha=0.5)
            else:
                ax.fill_between(x, prior * density.pdf(x), color=f"C{k % 10}", alpha=0.3, linewidth=0)
    for decision, left, right in zip(rule.decisions, edges[:-1], edges[1:]):
        left, right = max(left, low), min(right, high)
        if right - left > 0.02 * (high - low):
            ax.text((left + right) / 2, 1.01, rule.names[decision], ha="center", va="bottom", fontsize="small",
                    transform=ax.get_xaxis_transform())
    if hidden:
        ax.text(0.99, 0.02, f"{hidden} of {len(rule.levels)} levels lie outside", ha="right", va="bottom",
                fontsize="small", transform=ax.transAxes)
    return ax


def fit(density, readings, ax=None):
    """Draw how well a density follows readings in both tails: log10 of the tail probabilities, fitted and counted.

    Left of the median the curve is the share of readings at or below, right of it the share above; both are
    straight where a tail is exponential and bend outwards where it is heavier.

    Parameters
    ----------
    density : Density
    readings : array_like of float, shape (n,)
        NaN are left out.
    ax : matplotlib.axes.Axes, optional

    Returns
    -------
    matplotlib.axes.Axes

    Raises
    ------
    ValueError
        If no reading is left.

    Examples
    --------
    >>> density = lm.gaussian(2.0, 0.5)
    >>> ax = lm.plot.fit(density, density.ppf(np.linspace(0.01, 0.99, 99)))
    >>> ax.get_ylabel()
    'log10 tail probability'
    """
    ax = _axes(ax)
    readings = np.asarray(readings, dtype=float).ravel()
    readings = readings[~np.isnan(readings)]
    if readings.size == 0:
        raise ValueError("readings holds no number; expected at least one")
    x, counts = np.unique(readings, return_counts=True)
    below = np.cumsum(counts)
    counted = np.minimum(below, readings.size - below + counts) / readings.size
    grid = _abscissae(density, x[0], x[-1])
    fitted = np.minimum(density.logcdf(grid), density.logsf(grid)) / math.log(10)
    ax.plot(x, np.log10(counted), ".", color="C0", markersize=3, label=f"{readings.size} readings")
    ax.plot(grid, fitted, color="C1", label="density")
    ax.set_ylim(-math.log10(readings.size) - 1, 0)
    ax.set_xlabel("reading")
    ax.set_ylabel("log10 tail probability")
    ax.legend(frameon=False)
    return ax


def tally(tally, names=None, ax=None):
    """Draw counts of decisions: a table coloured by the share within each state, or bars where no truth is known.

    Parameters
    ----------
    tally : Tally or array_like of int, shape (decisions, states) or (decisions,)
    names : sequence of str, optional
        Names of the decisions, and of as many states; by default numbers.
    ax : matplotlib.axes.Axes, optional

    Returns
    -------
    matplotlib.axes.Axes

    Examples
    --------
    >>> ax = lm.plot.tally([[480, 3], [20, 497]], names=["empty", "cap"])
    >>> [text.get_text() for text in ax.texts]
    ['480', '3', '20', '497']
    """
    ax = _axes(ax)
    counts = np.asarray(getattr(tally, "counts", tally))
    names = [str(k) for k in range(max(counts.shape))] if names is None else [str(name) for name in names]
    ax.set_ylabel("decision")
    if counts.ndim == 1:
        ax.barh(range(len(counts)), counts)
        ax.set_yticks(range(len(counts)), names[: len(counts)])
        ax.set_xlabel("readings")
        return ax
    totals = counts.sum(axis=0, keepdims=True)
    share = counts / np.maximum(totals, 1)
    ax.imshow(share, cmap="Greys", vmin=0, vmax=1, aspect="auto")
    for (row, column), count in np.ndenumerate(counts):
        ax.text(column, row, f"{count}", ha="center", va="center", color="w" if share[row, column] > 0.5 else "k")
    ax.set_yticks(range(counts.shape[0]), names[: counts.shape[0]])
    ax.set_xticks(range(counts.shape[1]), names[: counts.shape[1]])
    ax.set_xlabel("state")
    return ax


def _axes(ax):
    if ax is not None:
        return ax
    try:
        from matplotlib import pyplot
    except ImportError as missing:
        raise ImportError("limen.plot needs Matplotlib: pip install 'limen[plot]'") from missing
    return pyplot.gca()


def _span(all_densities, span):
    """First and last reading of a picture."""
    if span is not None:
        low, high = (float(edge) for edge in span)
        if not (math.isfinite(low) and math.isfinite(high) and low < high):
            raise ValueError(f"span is {span!r}; expected two finite readings in growing order")
        return low, high
    low = min(float(density.ppf(_EDGE)) for density in all_densities)
    high = max(float(density.isf(_EDGE)) for density in all_densities)
    margin = 0.05 * (high - low) or max(abs(low), 1.0) * 0.5
    return low - margin, high + margin


def _abscissae(density, low, high):
    """Where to draw a density between two readings: at its own quantiles, which for counts are the atoms, and else
    at even steps too."""
    even = np.linspace(0, 1, _STROKES + 2)[1:-1]
    tails = np.logspace(-12, -3, _STROKES // 2)
    x = np.unique(np.concatenate([density.ppf(even), density.ppf(tails), density.isf(tails)]))
    if not density.discrete:
        x = np.union1d(np.linspace(low, high, _STROKES), x)
    return x[(x >= low) & (x <= high)]
