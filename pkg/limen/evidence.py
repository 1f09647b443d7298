"""What recordings say: bounds of rates from counts."""

from __future__ import annotations

import operator

from . import _core

__all__ = ["error_bounds"]


def error_bounds(errors: int, trials: int, confidence: float = 0.95) -> tuple[float, float]:
    """Exact two-sided bounds of an error rate, from errors counted in independent trials.

    Parameters
    ----------
    errors : int
        From 0 to `trials`.
    trials : int
        At least 1.
    confidence : float
        Between 0 and 1; each side leaves out half of the rest.

    Returns
    -------
    (float, float)
        Lower and upper bound, after Clopper and Pearson, Biometrika 26 (1934) 404. They hold whatever the true rate is;
        they are too narrow where trials depend on one another.

    Raises
    ------
    ValueError
        Counts or a confidence outside those ranges.

    Examples
    --------
    >>> low, high = lm.error_bounds(3, 1000)
    >>> print(f"{low:.6f} {high:.6f}")
    0.000619 0.008742
    >>> lm.error_bounds(0, 10**9)[0]
    0.0
    """
    return _core.error_bounds(operator.index(errors), operator.index(trials), confidence)
