"""Levels applied to arrays, without a rule object: `decide`, and what the machine runs."""

from __future__ import annotations

from typing import Any

import numpy as np

from . import _core
from ._arrays import decide_any

__all__ = ["build_info", "decide"]


def decide(x: Any, levels: Any, decisions: Any, out: np.ndarray | None = None) -> Any:
    """Decision of each reading: ``decisions[k]`` where k levels are <= x, and 255 where x is NaN.

    Parameters
    ----------
    x : array_like of real numbers
        Readings: NumPy arrays of any layout, memmaps, masked arrays, pandas, xarray and dask objects, lists, scalars,
        and anything NumPy or DLPack can view on the CPU. They are compared at their own type, never cast, and each
        decision equals the one float64 would give.
    levels : float64[..., m]
        Ascending, at most 254. Leading axes broadcast against `x`: each channel can have its own levels.
    decisions : uint8[..., m + 1]
        Code of each interval between the levels, from 0 to 254.
    out : uint8 ndarray, optional
        Where the codes go; of the broadcast shape.

    Returns
    -------
    uint8, in an array of the kind of `x` (lazy for dask)

    Raises
    ------
    ValueError
        Levels that are not ascending, or not one fewer than decisions.
    TypeError
        Readings that are complex, wider than 64 bits, carry units, or are on a GPU.

    Notes
    -----
    This is the generalized ufunc ``limen._core.decide``, ``(),(m),(n)->()``, behind an adapter for the kinds of arrays
    that ufuncs do not take. It starts no threads.

    Examples
    --------
    >>> import limen as lm
    >>> lm.decide([0.2, 1.7, float("nan")], [1.0], [0, 1]).tolist()
    [0, 1, 255]
    >>> lm.decide([[0.2, 1.7], [0.2, 1.7]], [[0.1], [0.5]], [0, 1]).tolist()   # a level for each column
    [[1, 1], [1, 1]]
    """
    return decide_any(x, levels, decisions, out=out, threads=1)


def build_info() -> dict[str, Any]:
    """What this build runs: version, kernels in use and usable, threads that calls may take.

    Returns
    -------
    dict
        ``version``; ``kernels``, the chosen set; ``usable_kernels``, best first (the environment variable LIMEN_CPU,
        read at import, forces one); ``threads``, from affinity and the quota of the control group.

    Examples
    --------
    >>> import limen as lm
    >>> lm.build_info()["kernels"] in lm.build_info()["usable_kernels"]
    True
    """
    chosen, usable = _core.kernels()
    return {"version": _core.__version__, "kernels": chosen, "usable_kernels": usable,
            "threads": _core.threads_available()}
