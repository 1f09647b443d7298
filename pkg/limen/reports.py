"""The page for a design review: one HTML file that holds all it shows and runs nothing."""

import html
import io
import json
import math
import re

import numpy as np

from . import _files, plot
from ._core import __version__

__all__ = ["report"]

_STYLE = """body{font:15px/1.5 sans-serif;max-width:60em;margin:2em auto;padding:0 1em;color:#222}
table{border-collapse:collapse;margin:.5em 0 1.5em}th,td{border:1px solid #bbb;padding:.2em .7em;text-align:right}
th{background:#f2f2f2;font-weight:600}td.text{text-align:left}caption{text-align:left;padding:.3em 0}
svg{max-width:100%;height:auto}pre{background:#f7f7f7;padding:1em;overflow:auto}"""

_CAUTIONS = (
    "Every predicted rate follows from the densities given above and is as good as they are. Below the least rate that "
    "the recordings can support, about three over the number of independent readings, it is an extrapolation.",
    "The bounds on counted rates are exact for independent readings. Drift and correlation make them too narrow.",
    "A level that can hurt someone, such as an alarm or a safety trip, is to be set and proven under the standard that "
    "governs it, with independent readings of the installed device. This page is no substitute.",
)


def report(path, rule, states, tally=None, confidence=0.95, title="Decision levels for review", span=None):
    """Write one self-contained HTML page on a rule for a design review.

    The page shows the states, the levels, how complete their search was, the transition matrix, the error rate of
    each state with its log10, what was counted with exact bounds beside what was predicted, a picture, the usual
    cautions, and the rule itself as JSON. It loads nothing, runs no script, and is the same for the same input.

    Parameters
    ----------
    path : str or os.PathLike
        Where to write; replaced as a whole or not at all.
    rule : Rule
    states : States
        The states to assess the rule against; they need not be those of its design.
    tally : Tally or array_like of int, shape (decisions, states), optional
        Counts of decisions by true state, from readings that did not serve to find the rule.
    confidence : float
        Of the bounds on counted rates.
    title : str
    span : (float, float), optional
        First and last reading of the picture.

    Raises
    ------
    ValueError
        If the counts of `tally` do not have one column for each state and one row for each decision.
    ImportError
        If Matplotlib is not installed.

    Examples
    --------
    >>> states = lm.States({"empty": lm.gaussian(0.8, 0.05), "cap": lm.gaussian(1.3, 0.07)}, priors=[0.02, 0.98])
    >>> lm.report("review.html", lm.bayes(states), states, title="Is the <cap> on?")
    >>> from pathlib import Path
    >>> "Is the &lt;cap&gt; on?" in Path("review.html").read_text(encoding="utf-8")
    True
    """
    assessment = rule.assess(states)
    parts = [
        f"<h1>{html.escape(title)}</h1>",
        _summary(rule, assessment),
        "<h2>States</h2>", _states_table(states),
        "<h2>Rule</h2>", _rule_table(rule),
        f"<p>Search for the levels: {html.escape(rule.search)}.</p>",
        "<h2>Predicted</h2>", _transition_table(rule, states, assessment), _error_table(rule, states, assessment),
    ]
    if tally is not None:
        parts += ["<h2>Counted</h2>", _tally_tables(rule, states, assessment, tally, confidence)]
    parts += [
        "<h2>Picture</h2>",
        "<p>Densities weighted with their priors, logarithmic; dashed lines are levels; a shaded area is the "
        "probability of an error.</p>", _picture(rule, states, span),
        "<h2>Cautions</h2>", "<ul>" + "".join(f"<li>{caution}</li>" for caution in _CAUTIONS) + "</ul>",
        "<h2>The rule</h2>", f"<pre>{html.escape(json.dumps(rule.to_dict(), indent=1))}</pre>",
        f"<p>Written by limen {__version__}.</p>",
    ]
    page = (f'<!DOCTYPE html>\n<html lang="en"><head><meta charset="utf-8"><title>{html.escape(title)}</title>\n'
            f"<style>{_STYLE}</style></head>\n<body>\n" + "\n".join(parts) + "\n</body></html>\n")
    _files.replace(path, page)


def _summary(rule, assessment):
    levels = len(rule.levels)
    return (f"<p>{levels} level{'' if levels == 1 else 's'}; predicted error rate "
            f"{_rate(assessment.error_rate, assessment.log10_error_rate)} "
            f"(log10 {assessment.log10_error_rate:.6g}).</p>")


def _states_table(states):
    rows = [(name, repr(density), f"{prior:.6g}", f"{density.mean:.6g}", f"{density.sd:.6g}")
            for name, density, prior in zip(states.names, states.densities, states.priors)]
    return _table(("state", "density of the reading", "prior", "mean", "sd"), rows, text_columns=2)


def _rule_table(rule):
    edges = ["-inf", *(repr(float(level)) for level in rule.levels), "inf"]
    rows = [(left, right, rule.names[decision])
            for left, right, decision in zip(edges[:-1], edges[1:], rule.decisions)]
    return _table(("from (included)", "to (excluded)", "decision"), rows, text_columns=0)


def _transition_table(rule, states, assessment):
    rows = [(rule.names[d], *(_rate(p, log10) for p, log10 in zip(assessment.transition[d], logs)))
            for d, logs in enumerate(assessment.log10_transition)]
    return _table(("declared, when the state is", *states.names), rows, caption="Transition matrix")


def _errors_of_states(rule, states, matrix):
    """For each state, the sum of the column of a matrix over the decisions that are not that state."""
    right = np.array([[decision == state for state in states.names] for decision in rule.names])
    return np.where(right, 0, matrix).sum(axis=0)


def _error_table(rule, states, assessment):
    wrong = _errors_of_states(rule, states, assessment.transition)
    with np.errstate(divide="ignore"):
        rows = [(name, _rate(p, log10), f"{log10:.4f}") for name, p, log10 in
                zip(states.names, wrong, _log10_errors_of_states(rule, states, assessment.log10_transition))]
    rows.append(("all, by prior", _rate(assessment.error_rate, assessment.log10_error_rate),
                 f"{assessment.log10_error_rate:.4f}"))
    return _table(("state", "error rate", "log10"), rows, caption="Error rates")


def _log10_errors_of_states(rule, states, log10):
    """The same sums from logarithms, so that none underflows."""
    logs = [[row[k] for name, row in zip(rule.names, log10) if name != state] for k, state in enumerate(states.names)]
    return [_log10_sum(terms) for terms in logs]


def _log10_sum(terms):
    largest = max(terms, default=-math.inf)
    if largest == -math.inf:
        return largest
    return largest + math.log10(sum(10 ** (term - largest) for term in terms))


def _tally_tables(rule, states, assessment, tally, confidence):
    from .evidence import error_bounds

    counts = np.asarray(getattr(tally, "counts", tally))
    if counts.shape != (len(rule.names), len(states.names)):
        raise ValueError(f"tally has counts of shape {counts.shape}; expected (decisions, states) = "
                         f"({len(rule.names)}, {len(states.names)})")
    matrix = _table(("declared, when the state is", *states.names),
                    [(rule.names[d], *(str(count) for count in row)) for d, row in enumerate(counts)],
                    caption="Counts")
    predicted = [*_errors_of_states(rule, states, assessment.transition), assessment.error_rate]
    wrong = _errors_of_states(rule, states, counts)
    rows = []
    for name, p, errors, trials in zip([*states.names, "all, as they came"], predicted, [*wrong, wrong.sum()],
                                       [*counts.sum(axis=0), counts.sum()]):
        if trials:
            low, high = error_bounds(int(errors), int(trials), confidence)
            shares = (f"{share:.6g}" for share in (errors / trials, low, high, p))
            rows.append((name, str(errors), str(trials), *shares))
        else:
            rows.append((name, "0", "0", "-", "0", "1", f"{p:.6g}"))
    bounds = _table(("state", "errors", "readings", "counted", "lower", "upper", "predicted"), rows,
                    caption=f"Error rates with exact {100 * confidence:g} % bounds")
    invalid = getattr(tally, "invalid", 0)
    lost = f"<p>{np.sum(invalid)} readings were not a number and are not counted above.</p>"
    return matrix + bounds + (lost if np.any(invalid) else "")


def _picture(rule, states, span):
    """The rule over its states as SVG text, the same for the same input."""
    try:
        import matplotlib
        from matplotlib.figure import Figure
    except ImportError as missing:
        raise ImportError("limen.report needs Matplotlib: pip install 'limen[plot]'") from missing
    with matplotlib.rc_context({"svg.hashsalt": "limen", "svg.fonttype": "none"}):
        figure = Figure(figsize=(9, 4.5), layout="tight")
        plot.rule(rule, states, span=span, log=True, ax=figure.add_subplot())
        file = io.StringIO()
        figure.savefig(file, format="svg", metadata={"Date": None, "Creator": None})
    svg = file.getvalue()
    svg = svg[svg.index("<svg"):]
    return re.sub(r"<metadata>.*?</metadata>", "", svg, flags=re.S)


def _rate(p, log10):
    """A probability for reading; from its logarithm where a double cannot hold it."""
    return f"{p:.6g}" if p > 1e-300 or log10 == -math.inf else f"10^{log10:.4f}"


def _table(head, rows, text_columns=1, caption=""):
    def cell(tag, text, is_text=False):
        return f'<{tag}{" class=text" if is_text else ""}>{html.escape(str(text))}</{tag}>'

    lines = ["<table>" + (f"<caption>{html.escape(caption)}</caption>" if caption else "")]
    lines.append("<tr>" + "".join(cell("th", text) for text in head) + "</tr>")
    for row in rows:
        lines.append("<tr>" + "".join(cell("td", text, k < text_columns) for k, text in enumerate(row)) + "</tr>")
    return "\n".join(lines) + "</table>"
