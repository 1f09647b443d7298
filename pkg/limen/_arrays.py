"""Internal adapters: what kind of array came in, which C call serves it, and the same kind back.

Foreign libraries are recognised by name among the modules that are already imported; none is imported here.
"""

from __future__ import annotations

import os
import sys
import threading
from typing import Any

import numpy as np

from . import _core

FEW = 1 << 21  # readings; below this a thread costs more than it saves


def as_levels(levels: Any, *, axes: bool = False) -> np.ndarray:
    """Levels as C-contiguous float64; of one dimension unless `axes` allows leading ones (a set for each channel)."""
    array = np.asarray(levels)
    if array.dtype.kind not in "biuf" and array.size:
        raise TypeError(f"levels holds {array.dtype}; expected real numbers")
    if array.ndim == 0 or (array.ndim > 1 and not axes):
        raise ValueError(f"levels has shape {array.shape}; expected a list of numbers")
    return np.ascontiguousarray(array, dtype=np.float64)


def as_codes(codes: Any, invalid: int = 255) -> np.ndarray:
    """Decision codes as C-contiguous uint8; whole numbers from 0 to 255 other than `invalid`."""
    array = np.asarray(codes)
    if array.dtype != np.uint8:
        if array.dtype.kind not in "iub":
            raise TypeError(f"decisions holds {array.dtype}; expected whole numbers from 0 to 255")
        wrong = (array < 0) | (array > 255)
        if wrong.any():
            raise ValueError(f"decisions holds {array[wrong].flat[0]}; expected whole numbers from 0 to 255")
        array = array.astype(np.uint8)
    if (array == invalid).any():
        raise ValueError(f"decisions holds {invalid}, which is the code of NaN; expected other codes")
    return np.ascontiguousarray(array)


def thread_count(threads: int | None, size: int) -> int:
    """Threads for `size` readings: as asked, else LIMEN_THREADS or the processors this process may use.

    Small arrays get 1, and so do calls from other threads than the main one: whoever runs those (dask, a pool) has
    spread the work already.
    """
    if threads is None:
        if size < FEW or threading.current_thread() is not threading.main_thread():
            return 1
        wanted = os.environ.get("LIMEN_THREADS", "")
        if not wanted:
            return _core.threads_available()
        if not wanted.isdecimal() or int(wanted) < 1:
            raise ValueError(f"LIMEN_THREADS is {wanted!r}; expected a whole number of at least 1")
        return int(wanted)
    if isinstance(threads, bool) or not isinstance(threads, (int, np.integer)) or threads < 1:
        raise ValueError(f"threads is {threads!r}; expected None or a whole number of at least 1")
    return int(threads)


def _is(x: Any, module: str, *names: str) -> bool:
    """Whether x is an instance of one of the classes of a module, if that module is loaded at all."""
    loaded = sys.modules.get(module)
    return loaded is not None and any(isinstance(x, getattr(loaded, name, ())) for name in names)


def refuse_units_and_devices(x: Any) -> None:
    """TypeError with the way out, for arrays whose numbers mean nothing without a unit or are not in main memory."""
    root = type(x).__module__.partition(".")[0]
    if root == "astropy" and hasattr(x, "to_value"):
        raise TypeError("x has a unit: pass x.to_value(unit), in the unit of the levels")
    if root in ("pint", "unyt", "quantities") and hasattr(x, "units"):
        raise TypeError("x has a unit: pass x.to(unit).magnitude, in the unit of the levels")
    if root == "cupy":
        raise TypeError("x is on a GPU: pass x.get()")
    if root == "torch" and getattr(getattr(x, "device", None), "type", "cpu") != "cpu":
        raise TypeError("x is on a GPU: pass x.cpu()")
    if root in ("jax", "jaxlib") and any(d.platform != "cpu" for d in getattr(x, "devices", set)()):
        raise TypeError("x is on a GPU: pass jax.device_get(x)")


def as_readings(x: Any) -> np.ndarray:
    """x as an ndarray (a view where there can be one) of real numbers of at most 64 bits."""
    if type(x) is not np.ndarray:
        refuse_units_and_devices(x)
        if isinstance(x, (float, np.floating)) and not isinstance(x, np.floating):
            x = np.float64(x)  # a bare float would be taken as any width
        if hasattr(x, "__dlpack__") and not hasattr(x, "__array__") and not hasattr(x, "__array_interface__"):
            x = np.from_dlpack(x)
        x = np.asarray(x)
    kind = x.dtype.kind
    if kind in "biu" or (kind == "f" and x.dtype.itemsize <= 8):
        return x
    if kind == "f":
        raise TypeError(f"x holds {x.dtype}; expected at most 64 bits: pass x.astype('float64')")
    if x.size == 0 and kind == "O":
        return x.astype(np.float64)
    raise TypeError(f"x holds {x.dtype}; expected real numbers of at most 64 bits")


def decide_any(x: Any, levels: Any, codes: Any, *, invalid: int = 255, out: np.ndarray | None = None,
               threads: int | None = None) -> Any:
    """Codes of the readings x, which may be any kind of array; what comes back is of the same kind.

    Parameters
    ----------
    x : scalar, list, ndarray, memmap, masked array, pandas, xarray, dask, or anything NumPy or DLPack can view
        Readings. Never cast: floats of 16, 32, 64 bits and integers of 8 to 64 bits each have their kernel.
    levels : float64[m] or float64[..., m]
        Ascending; leading axes broadcast against x and give each channel its own.
    codes : uint8[m + 1] or uint8[..., m + 1]
        Code of each interval between the levels; a level belongs to the interval on its right.
    invalid : int
        Code of NaN and of masked or missing readings.
    out : uint8 ndarray, optional
        For scalars, lists and NumPy arrays: where the codes go; of the shape of x.
    threads : int, optional
        None: as many as this process may use, 1 for small arrays and off the main thread.

    Returns
    -------
    uint8, in a container of the kind of x: a NumPy scalar for a scalar, a lazy array for dask.
    """
    if type(x) is not np.ndarray:
        special = _special(x, out, lambda a, n: decide_any(a, levels, codes, invalid=invalid, threads=n), threads,
                           (levels, codes, invalid))
        if special is not None:
            return special
    array = as_readings(x)
    levels = as_levels(levels, axes=True)
    codes = as_codes(codes, invalid)
    if out is not None and np.may_share_memory(array, out):
        array = array.copy()
    if levels.ndim > 1 or codes.ndim > 1:
        result = _core.decide(array, levels, codes) if out is None else _core.decide(array, levels, codes, out=out)
        if invalid != 255:
            result = np.asarray(result)
            result[result == 255] = invalid
        return result
    result = _core.slice(array, levels, codes, invalid, out, thread_count(threads, array.size))
    return result[()] if out is None and array.ndim == 0 else result


def _special(x: Any, out: Any, run: Any, threads: int | None, rule: tuple) -> Any:
    """The answer for masked, pandas, xarray and dask objects; None for everything else.

    run(array, threads) decides a NumPy (or, from xarray, any) array.
    """
    if isinstance(x, np.ma.MaskedArray):
        codes = run(x.data, threads)
        mask = np.ma.getmaskarray(x)
        codes = np.asarray(codes)
        codes[mask] = rule[2]
        result: Any = np.ma.array(codes, mask=mask, copy=False)
    elif _is(x, "pandas", "Series", "Index"):
        result = _pandas_values(x, run, threads, rule[2])
        extra = {"index": x.index} if _is(x, "pandas", "Series") else {}
        result = type(x)._constructor(result, name=x.name, **extra) if extra else \
            sys.modules["pandas"].Index(result, name=x.name)
    elif _is(x, "pandas", "DataFrame"):
        columns = [_pandas_values(x.iloc[:, i], run, threads, rule[2]) for i in range(x.shape[1])]
        result = sys.modules["pandas"].DataFrame(dict(enumerate(columns)), index=x.index)
        result.columns = x.columns
    elif _is(x, "xarray", "DataArray", "Dataset", "Variable"):
        result = sys.modules["xarray"].apply_ufunc(lambda a: run(a, threads), x, dask="allowed")
    elif _is(x, "dask.array", "Array"):
        result = _dask(x, run, rule)
    else:
        return None
    if out is not None:
        raise TypeError(f"out cannot be given with a {type(x).__module__.partition('.')[0]} "
                        f"{type(x).__name__}; expected none")
    return result


def _pandas_values(series: Any, run: Any, threads: int | None, invalid: int) -> np.ndarray:
    """Codes of a pandas Series or Index; missing values of nullable types get the invalid code."""
    if isinstance(series.dtype, np.dtype):
        return np.asarray(run(series.to_numpy(), threads))
    numpy_dtype = getattr(series.dtype, "numpy_dtype", None)
    if numpy_dtype is None or numpy_dtype.kind not in "biuf":
        raise TypeError(f"x holds {series.dtype}; expected real numbers of at most 64 bits")
    missing = np.asarray(series.isna())
    codes = np.asarray(run(series.fillna(0).to_numpy(dtype=numpy_dtype), threads))
    codes[missing] = invalid
    return codes


def _dask(x: Any, run: Any, rule: tuple) -> Any:
    """A lazy dask array of codes; the scheduler has the threads, so each block is decided by one."""
    levels, codes, invalid = rule
    levels = as_levels(levels, axes=True)
    codes = as_codes(codes, invalid)
    if levels.ndim == 1 and codes.ndim == 1:
        return x.map_blocks(decide_any, levels, codes, invalid=invalid, threads=1, dtype=np.uint8,
                            meta=np.empty((0,) * x.ndim, np.uint8))
    da = sys.modules["dask.array"]
    tables = [da.from_array(np.ascontiguousarray(t), chunks=_chunks_like(x, t)) for t in (levels, codes)]
    return da.apply_gufunc(_decide_block, "(),(m),(n)->()", x, *tables, invalid=invalid, output_dtypes=np.uint8,
                           vectorize=False)


def _decide_block(x: np.ndarray, levels: np.ndarray, codes: np.ndarray, *, invalid: int) -> np.ndarray:
    return decide_any(x, levels, codes, invalid=invalid, threads=1)


def _chunks_like(x: Any, table: np.ndarray) -> tuple:
    """Chunks of a table of levels that fit those of the readings, its last axis whole."""
    leading = table.ndim - 1
    fitting = x.chunks[x.ndim - leading:] if leading <= x.ndim else ((s,) for s in table.shape[:-1])
    return (*(c if s != 1 else (1,) for c, s in zip(fitting, table.shape)), (table.shape[-1],))
