"""Counts of decisions, by true state where it is known."""

from __future__ import annotations

import html
from collections.abc import Sequence
from typing import Any

import numpy as np

__all__ = ["Tally"]


class Tally:
    """Counts of decisions by true state; tallies of parts add up to the tally of the whole.

    Parameters
    ----------
    counts : int[decision, state] or int[decision]
        How often each decision was taken in each state, or at all where the states are not known.
    invalid : int
        Readings that were NaN or missing; they are in none of the counts.
    names : sequence of str, optional
        Names of the decisions.
    states : sequence of str, optional
        Names of the states; by default the first names of the decisions.

    Examples
    --------
    >>> import limen as lm
    >>> t = lm.Tally([[98, 1], [2, 99]], invalid=3, names=["empty", "cap"])
    >>> (t + t).errors, t.error_rate
    (6, 0.015)
    >>> print(t)
    decision      empty        cap
    empty            98          1
    cap               2         99
    200 readings, 3 wrong: error rate 0.015; 3 more were NaN
    """

    __slots__ = {
        "counts": "intp[decision, state], or intp[decision] where the states are not known; read-only.",
        "invalid": "Readings that were NaN or missing.",
        "names": "Names of the decisions.",
        "states": "Names of the states; empty where they are not known.",
    }

    def __init__(self, counts: Any, invalid: int = 0, names: Sequence[str] = (), states: Sequence[str] | None = None):
        array = np.array(counts)
        if array.ndim not in (1, 2) or 0 in array.shape or array.dtype.kind not in "iu" or (array < 0).any():
            raise ValueError(f"counts has shape {array.shape} and type {array.dtype}; expected whole numbers of at "
                             "least 0 for each decision, or each decision and state")
        if invalid < 0 or invalid != int(invalid):
            raise ValueError(f"invalid is {invalid}; expected a whole number of at least 0")
        self.counts = array.astype(np.intp)
        self.counts.flags.writeable = False
        self.invalid = int(invalid)
        self.names = tuple(map(str, names)) or tuple(map(str, range(array.shape[0])))
        columns = array.shape[1] if array.ndim == 2 else 0
        self.states = tuple(map(str, states)) if states is not None else self.names[:columns]
        if len(self.names) != array.shape[0]:
            raise ValueError(f"names has {len(self.names)} entries; expected one for each of the "
                             f"{array.shape[0]} decisions")
        if len(self.states) != columns:
            raise ValueError(f"states has {len(self.states)} entries; expected one for each of {columns} states")

    @property
    def total(self) -> int:
        """Readings counted, those that were NaN left out."""
        return int(self.counts.sum())

    @property
    def correct(self) -> int:
        """Readings whose decision has the name of their state."""
        return int(self.counts[self._matches(same=True)].sum())

    @property
    def errors(self) -> int:
        """Readings whose decision has the name of another state; a decision that names no state is not wrong."""
        return int(self.counts[self._matches(same=False)].sum())

    @property
    def undecided(self) -> int:
        """Readings whose decision names no state at all."""
        return self.total - self.correct - self.errors

    @property
    def error_rate(self) -> float:
        """Wrong decisions for each reading counted; NaN when there are none."""
        return self.errors / self.total if self.total else float("nan")

    @property
    def transition(self) -> np.ndarray:
        """float64[decision, state]: the measured share of each decision in each state; NaN where a state is absent."""
        self._matches(same=True)
        per_state = self.counts.sum(axis=0)
        return np.divide(self.counts, per_state, out=np.full(self.counts.shape, np.nan), where=per_state > 0)

    def error_bounds(self, confidence: float = 0.95) -> tuple[float, float]:
        """Exact binomial bounds of the error rate: see `limen.error_bounds`."""
        import limen

        return limen.error_bounds(self.errors, self.total, confidence)

    def to_dict(self) -> dict[str, Any]:
        """Plain Python, for JSON; `Tally(**d)` makes it a tally again."""
        return {"counts": self.counts.tolist(), "invalid": self.invalid, "names": list(self.names),
                "states": list(self.states) if self.states else None}

    def _matches(self, same: bool) -> np.ndarray:
        """Which cells are right decisions, or wrong ones."""
        if self.counts.ndim == 1:
            raise ValueError("this tally holds no true states; expected one made with truth")
        equal = np.array([[name == state for state in self.states] for name in self.names])
        return equal if same else ~equal & equal.any(axis=1, keepdims=True)

    def __add__(self, other: Any) -> Tally:
        if isinstance(other, int) and other == 0:  # sum() starts with it
            return self
        if not isinstance(other, Tally):
            return NotImplemented
        if self.names != other.names or self.states != other.states:
            raise ValueError(f"tallies of {other.names} in {other.states} and of {self.names} in {self.states} "
                             "do not add")
        return Tally(self.counts + other.counts, self.invalid + other.invalid, self.names,
                     self.states if self.counts.ndim == 2 else None)

    __radd__ = __add__

    def __eq__(self, other: Any) -> bool:
        return isinstance(other, Tally) and self.to_dict() == other.to_dict()

    __hash__ = None  # type: ignore[assignment]

    def __reduce__(self) -> tuple:
        return Tally, (self.counts, self.invalid, self.names, self.states if self.counts.ndim == 2 else None)

    def _summary(self) -> str:
        text = f"{self.total} readings"
        if self.counts.ndim == 2:
            text += f", {self.errors} wrong" + (f", {self.undecided} undecided" if self.undecided else "")
            text += f": error rate {self.error_rate:.4g}"
        return text + (f"; {self.invalid} more were NaN" if self.invalid else "")

    def _table(self) -> list[list[str]]:
        columns = self.counts if self.counts.ndim == 2 else self.counts[:, None]
        return [["decision", *(self.states or ("readings",))],
                *([name, *map(str, row.tolist())] for name, row in zip(self.names, columns))]

    def __repr__(self) -> str:
        return f"<Tally of {len(self.names)} decisions: {self._summary()}>"

    def __str__(self) -> str:
        rows = self._table()
        first = max(len(row[0]) for row in rows)
        widths = [max(10, *(len(row[c]) for row in rows)) for c in range(1, len(rows[0]))]
        lines = [row[0].ljust(first) + "".join(f" {cell:>{w}}" for cell, w in zip(row[1:], widths)) for row in rows]
        return "\n".join([*lines, self._summary()])

    def _repr_html_(self) -> str:
        head, *body = [[html.escape(cell) for cell in row] for row in self._table()]
        cells = "".join(f"<tr><th>{row[0]}</th>{''.join(f'<td>{c}</td>' for c in row[1:])}</tr>" for row in body)
        return (f"<table><tr>{''.join(f'<th>{c}</th>' for c in head)}</tr>{cells}</table>"
                f"<p>{html.escape(self._summary())}</p>")
