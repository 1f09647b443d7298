"""States: the densities between which a rule decides, their names and their priors."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from . import _core
from ._core import Density as _CoreDensity
from .soft import Soft

__all__ = ["States"]

_SUM = 1e-9    # how far from 1 priors may sum, as they come from files with a few digits


class States:
    """What can be there, with the density of the reading and the prior of each; immutable.

    Parameters
    ----------
    densities : dict of str to Density
        At least two, in order.
    priors : sequence of float, optional
        How often each state occurs: at least 0, with sum 1 within 1e-9. By default all alike.

    Raises
    ------
    ValueError
        Fewer than two states, or priors that do not fit.
    TypeError
        Something that is no density.

    Examples
    --------
    >>> states = lm.States({"empty": lm.gaussian(0.8, 0.05), "cap": lm.gaussian(1.3, 0.07)}, priors=[0.02, 0.98])
    >>> states.names
    ('empty', 'cap')
    >>> states.posterior(1.0).round(4).tolist()
    [0.0854, 0.9146]
    """

    __slots__ = {
        "names": "Names of the states.",
        "densities": "Their densities.",
        "priors": "float64[state], sum 1; read-only.",
    }

    def __init__(self, densities: Mapping[str, Any], priors: Sequence[float] | None = None):
        if not isinstance(densities, Mapping):
            raise TypeError(f"densities is {type(densities).__name__}; expected a dict of names and densities")
        if len(densities) < 2:
            raise ValueError(f"densities holds {len(densities)} states; expected at least 2")
        for name, density in densities.items():
            if not isinstance(density, _CoreDensity):
                raise TypeError(f"the density of state {name!r} is {density!r}; expected a density")
        self._set(tuple(map(str, densities)), tuple(densities.values()), _as_priors(priors, len(densities)))

    def _set(self, names: tuple, densities: tuple, priors: np.ndarray) -> States:
        for name, value in (("names", names), ("densities", densities), ("priors", priors)):
            object.__setattr__(self, name, value)
        return self

    def __setattr__(self, name: str, value: Any) -> None:
        raise AttributeError(f"states are immutable: {name} cannot be set")

    def with_priors(self, priors: Sequence[float]) -> States:
        """The same states, occurring in other shares."""
        return States.__new__(States)._set(self.names, self.densities, _as_priors(priors, len(self.names)))

    def index(self, state: Any) -> int:
        """The place of a state, from its name or its place."""
        if state in self.names:
            return self.names.index(state)
        if isinstance(state, (int, np.integer)) and 0 <= state < len(self.names):
            return int(state)
        raise ValueError(f"state is {state!r}; expected one of {self.names}")

    def llr(self, x: Any, a: Any, b: Any) -> Any:
        """``log f_a(x) - log f_b(x)`` at each reading, natural logarithm."""
        return _core.log_ratio(self.densities[self.index(a)], self.densities[self.index(b)], x)

    def posterior(self, x: Any) -> np.ndarray:
        """float64[..., state]: the probability of each state at each reading; NaN where no state can give it."""
        with np.errstate(divide="ignore", invalid="ignore"):
            logs = np.stack([np.log(p) + np.asarray(d.logpdf(np.asarray(x, float)))
                             for p, d in zip(self.priors, self.densities)], axis=-1)
            parts = np.exp(logs - logs.max(axis=-1, keepdims=True))
            return parts / parts.sum(axis=-1, keepdims=True)

    def soft(self, a: Any, b: Any, dtype: Any = "float32", step: float | None = None) -> Soft:
        """The LLR of two states as a function of arrays, at array speed: see `limen.Soft`."""
        return Soft([self.densities[self.index(a)], self.densities[self.index(b)]], dtype=dtype, step=step)

    def soft_posterior(self, state: Any, dtype: Any = "float32") -> Soft:
        """The posterior of a state as a function of arrays, at array speed: see `limen.Soft`."""
        return Soft(self.densities, self.priors, self.index(state), dtype=dtype)

    def to_dict(self) -> dict[str, Any]:
        """Plain Python, for JSON."""
        return {"format": "limen states", "version": 1, "names": list(self.names),
                "densities": [d.to_dict() for d in self.densities], "priors": self.priors.tolist()}

    def __eq__(self, other: Any) -> bool:
        return isinstance(other, States) and self._key() == other._key()

    def __hash__(self) -> int:
        return hash(self._key())

    def _key(self) -> tuple:
        return self.names, self.densities, tuple(self.priors.tolist())

    def __reduce__(self) -> tuple:
        return States, (dict(zip(self.names, self.densities)), self.priors.tolist())

    def __len__(self) -> int:
        return len(self.names)

    def __repr__(self) -> str:
        rows = ", ".join(f"{n!r}: {d!r}" for n, d in zip(self.names, self.densities))
        return f"States({{{rows}}}, priors={self.priors.tolist()})"


def _as_priors(priors: Any, count: int) -> np.ndarray:
    if priors is None:
        array = np.full(count, 1 / count)
    else:
        array = np.array(priors, dtype=np.float64)
        if array.shape != (count,):
            raise ValueError(f"priors has shape {array.shape}; expected one number for each of {count} states")
        for k, prior in enumerate(array):
            if not (math.isfinite(prior) and prior >= 0):
                raise ValueError(f"priors[{k}] is {prior}; expected a finite number of at least 0")
        if abs(array.sum() - 1) > _SUM:
            raise ValueError(f"priors sum to {array.sum():.12g}; expected 1 within {_SUM:g}")
        array /= array.sum()
    array.flags.writeable = False
    return array
