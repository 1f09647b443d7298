"""Soft outputs at array speed: log likelihood ratios and posteriors through compiled tables."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from . import _core
from ._arrays import soft_any

__all__ = ["Soft"]

NAN_BYTE = -128


class Soft:
    """The log likelihood ratio of two states, or the posterior of one, as a function of arrays.

    Made by ``States.soft`` and ``States.soft_posterior``. The line of readings is cut into segments with a polynomial
    each, found from the densities themselves: any densities, their tails included. Readings that no segment covers
    (see `span`) take the exact way, which is some hundred times slower.

    Parameters
    ----------
    densities : sequence of densities
        Two for an LLR, ``log f_0(x) - log f_1(x)`` (natural logarithm); one for each state for a posterior.
    priors : sequence of float, optional
        With priors it is the posterior of `state`.
    state : int
        Whose posterior.
    dtype : "float32", "float64" or "int8"
        Of the values. int8 holds ``round(LLR / step)`` clipped to -127 ... 127, and -128 for NaN.
    step : float, optional
        LLR of one unit of int8; by default 1/8, for LLRs up to 15.9.

    Attributes
    ----------
    dtype : numpy.dtype
    step : float or None
    error_bound : float
        Of the table: 1e-6, relative to ``max(1, abs(value))`` (int8 adds half a step).

    Notes
    -----
    NaN readings give NaN, and so do readings that no state can give. The values are the same bits on every processor.

    Examples
    --------
    >>> states = lm.States({"one": lm.gaussian(1.0, 0.5), "zero": lm.gaussian(0.0, 0.5)})
    >>> states.soft("one", "zero", dtype="float64")([0.75, 1.0]).round(5).tolist()
    [1.0, 2.0]
    """

    error_bound = 1e-6

    def __init__(self, densities: Sequence[Any], priors: Sequence[float] | None = None, state: int = 0,
                 dtype: Any = "float32", step: float | None = None):
        self.dtype = np.dtype(dtype)
        if self.dtype not in (np.float32, np.float64, np.int8):
            raise TypeError(f"dtype is {self.dtype}; expected float32, float64 or int8")
        if self.dtype != np.int8 and step is not None:
            raise ValueError(f"step is {step}; only int8 has steps")
        if self.dtype == np.int8 and priors is not None:
            raise TypeError("dtype is int8, which holds LLRs; expected float32 or float64 for a posterior")
        self.step = (0.125 if step is None else float(step)) if self.dtype == np.int8 else None
        if self.step is not None and not 0 < self.step < np.inf:
            raise ValueError(f"step is {step}; expected a finite number above 0")
        self._made_from = (tuple(densities), None if priors is None else tuple(map(float, priors)), int(state))
        self.table = _core.Soft(*self._made_from)

    @property
    def fill(self) -> float | int:
        """The value of NaN and of missing readings."""
        return NAN_BYTE if self.dtype == np.int8 else np.nan

    @property
    def segments(self) -> int:
        """Segments of the table; 0 where all readings take the exact way, or a lattice one entry each."""
        return self.table.segments

    @property
    def span(self) -> tuple[float, float]:
        """The readings that the table covers."""
        return self.table.span

    def __call__(self, x: Any, out: np.ndarray | None = None, threads: int | None = None) -> Any:
        """The value at each reading.

        Parameters
        ----------
        x : array_like of real numbers
            As for ``Rule.decide``: any kind of array, never cast but where 64-bit integers become float64.
        out : ndarray of `dtype` and of the shape of x, optional
        threads : int, optional
            None: as many as this process may use, 1 for small arrays.

        Returns
        -------
        array of `dtype`, of the kind of `x`
        """
        return soft_any(x, self, out=out, threads=threads)

    def exact(self, x: Any) -> np.ndarray:
        """float64 values without the table, as slow as the densities are."""
        return self.table.exact(x)

    def __reduce__(self) -> tuple:
        return Soft, (*self._made_from, self.dtype.str, self.step)

    def __repr__(self) -> str:
        what = "LLR" if self._made_from[1] is None else f"posterior of state {self._made_from[2]}"
        step = f" in steps of {self.step:g}" if self.step else ""
        low, high = self.span
        return f"<Soft: {what}, {self.dtype}{step}, {self.segments} segments from {low:.4g} to {high:.4g}>"
