"""Rules: levels and the decision between them, found, assessed, applied and handed over."""

from __future__ import annotations

import json
import math
import os
import re
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from . import _core, _files
from ._arrays import decide_any, hysteresis_any, pack_any, tally_any, tally_held_any
from .states import States
from .tallies import Tally

__all__ = ["Assessment", "Rule", "bayes", "load", "rule"]

_FORMAT, _VERSION = "limen rule", 1
_INVALID = 255


class Rule:
    """Ordered levels and the decision of each interval between them; a level belongs to the interval on its right.

    Made by `bayes`, `rule` and `load`; immutable.

    Examples
    --------
    >>> r = lm.rule([1.0, 2.5], [0, 1, 0], ["normal", "alarm"])
    >>> r([0.2, 1.0, 2.4, 2.5, float("nan")]).tolist()
    [0, 1, 1, 0, 255]
    >>> print(r)
            -inf <= reading < 1.0           normal
             1.0 <= reading < 2.5           alarm
             2.5 <= reading < inf           normal
    """

    __slots__ = {
        "levels": "float64[m], ascending; read-only.",
        "decisions": "intp[m + 1], each an index into names; read-only.",
        "names": "Names of the decisions.",
        "search": "How complete the search for the levels was, in words.",
        "width": "Width of the hysteresis, or None.",
    }
    invalid = _INVALID

    def __init__(self, levels: Any, decisions: Any, names: Sequence[str], search: str = "given",
                 width: float | None = None):
        levels, decisions = _as_levels(levels), _as_decisions(decisions, len(names))
        if decisions.size != levels.size + 1:
            raise ValueError(f"decisions holds {decisions.size} entries; expected {levels.size + 1}, one more than "
                             "levels")
        self._set(levels, decisions, tuple(map(str, names)), str(search), width)

    def _set(self, levels: np.ndarray, decisions: np.ndarray, names: tuple, search: str, width: float | None) -> Rule:
        """Take over what is known to fit; a design costs less than the checks would."""
        put = object.__setattr__
        put(self, "levels", levels)
        put(self, "decisions", decisions)
        put(self, "names", names)
        put(self, "search", search)
        put(self, "width", width)
        return self

    def __setattr__(self, name: str, value: Any) -> None:
        raise AttributeError(f"rules are immutable: {name} cannot be set")

    def __call__(self, x: Any) -> Any:
        """uint8 decision of each reading; `invalid` (255) for NaN."""
        return self.decide(x)

    def decide(self, x: Any, out: np.ndarray | None = None, threads: int | None = None, start: Any = None) -> Any:
        """Decision of each reading.

        Parameters
        ----------
        x : array_like of real numbers
            Any kind of array; see `limen.decide`.
        out : uint8 ndarray of the shape of x, optional
        threads : int, optional
            None: as many as this process may use, 1 for small arrays.
        start : int, optional
            With hysteresis, the interval in which the readings start.

        Returns
        -------
        uint8, of the shape and kind of x; 255 for NaN
        """
        if self.width is None:
            return decide_any(x, self.levels, self.decisions, invalid=self.invalid, out=out, threads=threads)
        return hysteresis_any(x, self.levels, self.decisions, self.width, start, invalid=self.invalid, out=out)[0]

    def tally(self, x: Any, truth: Any = None, states: Sequence[str] | None = None, threads: int | None = None,
              start: Any = None) -> Tally:
        """Count decisions, by true state where it is known, in one pass.

        Parameters
        ----------
        x : array_like of real numbers
            A dask array is counted where its blocks are; only the counts travel.
        truth : int array_like of the shape of x, optional
            The true state of each reading: an index into `states`.
        states : sequence of str, optional
            By default the names of the decisions.
        threads : int, optional
        start : int, optional
            With hysteresis, the interval in which the readings start.
        """
        if truth is not None and states is None:
            states = self.names
        columns = None if states is None else len(states)
        if self.width is None:
            counts, invalid = tally_any(x, self.levels, self.decisions, truth, len(self.names), columns,
                                        threads=threads)
        else:
            counts, invalid, _ = tally_held_any(x, self.levels, self.decisions, self.width, truth, len(self.names),
                                                columns, start, threads)
        return Tally(counts, invalid, self.names, None if truth is None else states)

    def pack(self, x: Any, bitorder: str = "little", invalid: int | None = None, out: np.ndarray | None = None,
             threads: int | None = None) -> Any:
        """One bit a reading along the last axis, for rules between two decisions.

        Parameters
        ----------
        x : array_like of real numbers
        bitorder : "little" or "big"
            Whether the first reading is the lowest or the highest bit of its byte.
        invalid : 0 or 1, optional
            The bit of NaN, which is an error otherwise.
        out : uint8 ndarray, optional
        threads : int, optional
        """
        if self.width is not None:
            raise ValueError(f"the rule has hysteresis of width {self.width}; pack the codes of decide instead")
        return pack_any(x, self.levels, self.decisions, bitorder=bitorder, invalid=invalid, out=out, threads=threads)

    def with_hysteresis(self, width: float) -> Rule:
        """The same rule, left upwards at level + width / 2 and downwards below level - width / 2."""
        if not (math.isfinite(width) and width >= 0):
            raise ValueError(f"width is {width!r}; expected a finite number of at least 0")
        return Rule(self.levels, self.decisions, self.names, self.search, float(width))

    def assess(self, states: States, costs: Any = None) -> Assessment:
        """What the rule will do where readings follow these states, which need not be those of its design."""
        return Assessment(self, states, costs)

    def to_dict(self) -> dict[str, Any]:
        """Plain Python, for JSON."""
        plain = {"format": _FORMAT, "version": _VERSION, "levels": self.levels.tolist(),
                 "decisions": self.decisions.tolist(), "names": list(self.names), "search": self.search}
        return plain if self.width is None else {**plain, "width": self.width}

    def save(self, path: Any) -> None:
        """Write the rule as JSON, as a whole or not at all; `limen.load` reads it."""
        _files.replace(path, json.dumps(self.to_dict(), indent=1) + "\n")

    def to_c_header(self, name: str) -> str:
        """A C header with the levels, to the last bit, and an inline function ``name_decide(double)``."""
        if not re.fullmatch(r"[A-Za-z_][A-Za-z0-9_]*", name):
            raise ValueError(f"name is {name!r}; expected a C identifier")
        if self.width is not None:
            raise ValueError(f"the rule has hysteresis of width {self.width}; a C header holds rules without")
        upper = name.upper()
        names = "\n".join(f" *   {k}  {text.replace('*/', '* /')}" for k, text in enumerate(self.names))
        levels = ",\n    ".join(f"{float(level).hex()} /* {float(level)!r} */" for level in self.levels) or "0.0"
        decisions = ", ".join(map(str, self.decisions.tolist()))
        return f"""/* Decision levels: a reading x is {name}_decision[number of levels <= x]; NaN gives {_INVALID}.
{names}
 */
#ifndef {upper}_LEVELS_H
#define {upper}_LEVELS_H

#define {upper}_LEVELS {self.levels.size}

static const double {name}_level[] = {{
    {levels}
}};
static const unsigned char {name}_decision[] = {{{decisions}}};

static inline unsigned char {name}_decide(double x)
{{
    int below = 0, k;
    if (x != x)
        return {_INVALID};
    for (k = 0; k < {upper}_LEVELS; k++)
        below += x >= {name}_level[k];
    return {name}_decision[below];
}}

#endif
"""

    def __eq__(self, other: Any) -> bool:
        return isinstance(other, Rule) and self._key() == other._key()

    def __hash__(self) -> int:
        return hash(self._key())

    def _key(self) -> tuple:
        return tuple(self.levels.tolist()), tuple(self.decisions.tolist()), self.names, self.width

    def __reduce__(self) -> tuple:
        return Rule, (self.levels.tolist(), self.decisions.tolist(), self.names, self.search, self.width)

    def __repr__(self) -> str:
        return f"<Rule of {self.levels.size} levels between {', '.join(self.names)}>"

    def __str__(self) -> str:
        edges = [-math.inf, *self.levels.tolist(), math.inf]
        return "\n".join(f"{left!r:>12} <= reading < {right!r:<12}  {self.names[decision]}"
                         for left, right, decision in zip(edges[:-1], edges[1:], self.decisions))


class Assessment:
    """What a rule will do: made by ``Rule.assess``.

    Examples
    --------
    >>> states = lm.States({"empty": lm.gaussian(0.0, 1.0), "cap": lm.gaussian(100.0, 1.0)})
    >>> a = lm.bayes(states).assess(states)
    >>> a.error_rate, round(a.log10_error_rate, 6)
    (0.0, -544.966336)
    """

    __slots__ = {
        "log_transition": "float64[decision, state]: natural logarithms of the transition matrix.",
        "log10_transition": "float64[decision, state].",
        "transition": "float64[decision, state]: the probability of each decision in each state.",
        "log10_error_rate": "Decimal logarithm of the error rate.",
        "error_rate": "Prior-weighted probability of declaring another state than the one that is there.",
        "log10_risk": "Decimal logarithm of the risk; NaN where it is negative.",
        "risk": "Prior-weighted cost.",
    }

    def __init__(self, rule: Rule, states: States, costs: Any = None):
        if not isinstance(states, States):
            raise TypeError(f"states is {type(states).__name__}; expected States")
        if not set(rule.names) & set(states.names):
            raise ValueError(f"no decision of {rule.names} is one of the states {states.names}")
        matrix = _as_costs(costs, states.names, rule.names)
        log = _core.transition(rule.levels, rule.decisions, len(rule.names), states.densities)
        wrong = _wrong(states.names, rule.names)
        log_error, _ = _core.log_risk(log, states.priors, wrong)
        above, below = (log_error, -math.inf) if costs is None else _core.log_risk(log, states.priors, matrix)
        ten = math.log(10)
        self.log_transition, self.log10_transition, self.transition = log, log / ten, np.exp(log)
        self.log10_error_rate, self.error_rate = log_error / ten, math.exp(log_error)
        self.risk = math.exp(above) - math.exp(below)
        self.log10_risk = above / ten if below == -math.inf else math.log10(self.risk) if self.risk > 0 else math.nan

    def __repr__(self) -> str:
        return f"<Assessment: error rate {self.error_rate:.6g} (log10 {self.log10_error_rate:.6g})>"


def bayes(states: States, costs: Any = None, decisions: Sequence[str] | None = None) -> Rule:
    """The rule of least prior-weighted cost.

    Parameters
    ----------
    states : States
    costs : array_like of float, shape (decisions, states), or dict, optional
        ``costs[decision, state]``, finite; or ``{(decision, state): cost}`` with those of 1 left out for wrong and of
        0 for right ones. By default each wrong decision costs 1.
    decisions : sequence of str, optional
        Names of the decisions; by default those of the states.

    Returns
    -------
    Rule
        Every level is found, over all finite doubles; `search` says so.

    Raises
    ------
    ValueError
        Costs that do not fit, counts compared with continuous readings.

    Examples
    --------
    >>> states = lm.States({"empty": lm.gaussian(0.8, 0.05), "cap": lm.gaussian(1.3, 0.07)}, priors=[0.02, 0.98])
    >>> r = lm.bayes(states, {("cap", "empty"): 400, ("empty", "cap"): 1})
    >>> [r.names[d] for d in r.decisions], r.search
    (['cap', 'empty', 'cap'], 'exhaustive')
    """
    if not isinstance(states, States):
        raise TypeError(f"states is {type(states).__name__}; expected States")
    if costs is None and decisions is None:
        names, matrix = states.names, None
    else:
        names = states.names if decisions is None else tuple(map(str, decisions))
        matrix = _as_costs(costs, states.names, names)
    if len(names) >= _INVALID:
        raise ValueError(f"decisions has {len(names)} names; expected at most {_INVALID - 1}")
    levels, chosen, search = _core.bayes(states.densities, states.priors, matrix)
    return Rule.__new__(Rule)._set(levels, chosen, names, _in_words(*search), None)


def rule(levels: Any, decisions: Any, names: Sequence[str]) -> Rule:
    """A rule from outside: what the hardware does today.

    Parameters
    ----------
    levels : array_like of float, shape (m,)
        Ascending.
    decisions : array_like of int, shape (m + 1,)
        Indices into `names`.
    names : sequence of str

    Raises
    ------
    ValueError
        Levels out of order or NaN, another number of decisions, a decision without a name.

    Examples
    --------
    >>> lm.rule([1.05], [0, 1], ["empty", "cap"])([1.04, 1.05]).tolist()
    [0, 1]
    """
    return Rule(levels, decisions, names)


def load(path: Any) -> Rule:
    """Read a rule that ``Rule.save`` wrote.

    Parameters
    ----------
    path : str or os.PathLike

    Raises
    ------
    ValueError
        Not such a file, a newer version, or an entry that is missing or does not fit; the message names the file.

    Examples
    --------
    >>> r = lm.rule([1.05], [0, 1], ["empty", "cap"])
    >>> r.save("rule.json")
    >>> lm.load("rule.json") == r
    True
    """
    with open(path, encoding="utf-8") as file:
        text = file.read()
    name = os.fspath(path)
    try:
        plain = json.loads(text)
    except json.JSONDecodeError as bad:
        raise ValueError(f"{name} is not JSON: {bad}") from bad
    if not isinstance(plain, dict):
        raise ValueError(f"{name} holds {type(plain).__name__}; expected a rule")
    missing = [key for key in ("format", "version", "levels", "decisions", "names", "search") if key not in plain]
    if missing:
        raise ValueError(f"{name} has no {missing[0]!r}; expected a rule")
    for key, wanted in (("format", _FORMAT), ("version", _VERSION)):
        if plain[key] != wanted:
            raise ValueError(f"{name} has {key} {plain[key]!r}; expected {wanted!r}")
    names = plain["names"]
    if not (isinstance(names, list) and names and all(isinstance(text, str) for text in names)):
        raise ValueError(f"{name} has names {names!r}; expected texts")
    try:
        found = Rule(plain["levels"], plain["decisions"], names, plain["search"])
        return found if plain.get("width") is None else found.with_hysteresis(plain["width"])
    except (TypeError, ValueError) as bad:
        raise ValueError(f"{name}: {bad}") from bad


def _as_levels(levels: Any) -> np.ndarray:
    try:
        array = np.array(levels, dtype=np.float64)
    except (TypeError, ValueError):
        array = None
    if array is None or array.ndim != 1:
        raise ValueError(f"levels is {levels!r}; expected a list of numbers")
    if np.isnan(array).any():
        raise ValueError(f"levels[{int(np.isnan(array).argmax())}] is nan; expected numbers in ascending order")
    if not (np.diff(array) > 0).all():
        raise ValueError(f"levels is {array.tolist()}; expected numbers in ascending order")
    array.flags.writeable = False
    return array


def _as_decisions(decisions: Any, count: int) -> np.ndarray:
    array = np.array(decisions)
    if array.ndim != 1 or array.dtype.kind not in "iu":
        raise ValueError(f"decisions is {decisions!r}; expected a list of whole numbers")
    wrong = array[(array < 0) | (array >= min(count, _INVALID))]
    if wrong.size:
        raise ValueError(f"decisions holds {wrong[0]}; expected indices of the {count} names")
    array = array.astype(np.intp)
    array.flags.writeable = False
    return array


def _wrong(states: Sequence[str], decisions: Sequence[str]) -> np.ndarray:
    """1 where a decision names another state than the one that is there; a decision that names none is not wrong."""
    return np.array([[float(decision in states and decision != state) for state in states] for decision in decisions])


def _as_costs(costs: Any, states: Sequence[str], decisions: Sequence[str]) -> np.ndarray:
    shape = (len(decisions), len(states))
    if costs is None:
        return _wrong(states, decisions)
    if isinstance(costs, Mapping):
        matrix = _wrong(states, decisions)
        for (decision, state), cost in costs.items():
            if decision not in decisions or state not in states:
                raise ValueError(f"costs names {(decision, state)!r}; expected a decision of {tuple(decisions)} and a "
                                 f"state of {tuple(states)}")
            matrix[decisions.index(decision), states.index(state)] = cost
    else:
        try:
            matrix = np.array(costs, dtype=np.float64)
        except (TypeError, ValueError) as bad:
            raise ValueError(f"costs is {costs!r}; expected {shape[0]} rows of {shape[1]} numbers") from bad
        if matrix.shape != shape:
            raise ValueError(f"costs has shape {matrix.shape}, for {shape[0]} decisions and {shape[1]} states; "
                             f"expected {shape}")
    if not np.isfinite(matrix).all():
        d, s = np.argwhere(~np.isfinite(matrix))[0]
        raise ValueError(f"costs[{d}, {s}] is {matrix[d, s]}; expected finite numbers")
    return matrix


def _in_words(pieces: int, touches: int, unresolved: int, sampled: int, resolution: float) -> str:
    """How a search went."""
    if not (touches or unresolved or sampled):
        return "exhaustive"
    words = []
    if sampled:
        words.append(f"sampled at {resolution:.3g} of the smallest scale, for {sampled} pairs of decisions")
    if unresolved:
        words.append(f"{unresolved} places open at the resolution of doubles")
    if not words:
        words.append("exhaustive")
    if touches:
        words.append(f"{touches} touches without crossing")
    return "; ".join(words)
