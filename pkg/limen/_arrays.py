"""Internal adapters: what kind of array came in, which C call serves it, and the same kind back.

Foreign libraries are recognised by name among the modules that are already imported; none is imported here.
"""

from __future__ import annotations

import functools
import math
import os
import sys
import threading
import time
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


@functools.lru_cache(maxsize=1)
def _threads_available(moment: int) -> int:
    """Asked anew every few seconds: quotas change, but reading them takes longer than slicing a million readings."""
    return _core.threads_available()


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
            return _threads_available(int(time.monotonic() / 5))
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
                           invalid, lambda: _dask(x, levels, codes, invalid))
        if special is not None:
            return special
    array = as_readings(x)
    levels = as_levels(levels, axes=True)
    codes = as_codes(codes, invalid)
    if out is not None and np.may_share_memory(array, out):
        array = array.copy()
    if levels.ndim > 1 or codes.ndim > 1:
        return _decide_channels(array, levels, codes, invalid, out, threads)
    result = _core.slice(array, levels, codes, invalid, out, thread_count(threads, array.size))
    return result[()] if out is None and array.ndim == 0 else result


def _decide_channels(x: np.ndarray, levels: np.ndarray, codes: np.ndarray, invalid: int, out: np.ndarray | None,
                     threads: int | None) -> np.ndarray:
    """Each channel with its own levels: a kernel where the channels are the last axes of x, else the ufunc."""
    lead = np.broadcast_shapes(levels.shape[:-1], codes.shape[:-1])
    if codes.shape[-1] != levels.shape[-1] + 1:
        raise ValueError(f"decisions has {codes.shape[-1]} entries; expected one more than {levels.shape[-1]} levels")
    if x.size == 0 or x.shape[x.ndim - len(lead):] != lead:
        result = _core.decide(x, levels, codes) if out is None else _core.decide(x, levels, codes, out=out)
        if invalid != 255:
            result = np.asarray(result)
            result[result == 255] = invalid
        return result
    result = np.empty(x.shape, np.uint8) if out is None else _checked_out(out, x.shape)
    channels = math.prod(lead)
    levels = np.ascontiguousarray(np.broadcast_to(levels, (*lead, levels.shape[-1]))).reshape(channels, -1)
    if codes.ndim > 1:
        codes = np.ascontiguousarray(np.broadcast_to(codes, (*lead, codes.shape[-1]))).reshape(channels, -1)
    # whole where they lie in order, else row by row of the first axis, a few at a time, through contiguous copies
    rows = x.shape[0] if len(lead) < x.ndim else 1
    frames, target = (x, result) if len(lead) < x.ndim else (x[None], result[None])
    direct = x.flags.c_contiguous and x.flags.aligned and x.dtype.isnative and result.flags.c_contiguous
    step = rows if direct else max(1, rows * FEW // (8 * x.size))
    for at in range(0, rows, step):
        part = np.ascontiguousarray(frames[at:at + step], dtype=x.dtype.newbyteorder("="))
        part = part if part.flags.aligned else part.copy()
        codes_part = target[at:at + step] if target.flags.c_contiguous else np.empty(part.shape, np.uint8)
        _core.channels(part, levels, codes, codes_part, invalid, thread_count(threads, x.size))
        if not target.flags.c_contiguous:
            target[at:at + step] = codes_part
    return result


def _special(x: Any, out: Any, run: Any, threads: int | None, fill: Any, lazily: Any) -> Any:
    """The answer for masked, pandas, xarray and dask objects; None for everything else.

    run(array, threads) serves a NumPy (or, from xarray, any) array; fill marks what is masked or missing; lazily()
    makes the dask array.
    """
    if isinstance(x, np.ma.MaskedArray):
        values = np.asarray(run(x.data, threads))
        mask = np.ma.getmaskarray(x)
        values[mask] = fill
        result: Any = np.ma.array(values, mask=mask, copy=False)
    elif _is(x, "pandas", "Series", "Index"):
        result = _like_pandas(x, _pandas_values(x, run, threads, fill))
    elif _is(x, "pandas", "DataFrame"):
        columns = [_pandas_values(x.iloc[:, i], run, threads, fill) for i in range(x.shape[1])]
        result = sys.modules["pandas"].DataFrame(dict(enumerate(columns)), index=x.index)
        result.columns = x.columns
    elif _is(x, "xarray", "DataArray", "Dataset", "Variable"):
        result = sys.modules["xarray"].apply_ufunc(lambda a: run(a, threads), x, dask="allowed")
    elif _is(x, "dask.array", "Array"):
        result = lazily()
    else:
        return None
    if out is not None:
        raise TypeError(f"out cannot be given with a {type(x).__module__.partition('.')[0]} "
                        f"{type(x).__name__}; expected none")
    return result


def _pandas_values(series: Any, run: Any, threads: int | None, fill: Any) -> np.ndarray:
    """Values for a pandas Series or Index; missing ones of nullable types get the fill."""
    if isinstance(series.dtype, np.dtype):
        return np.asarray(run(series.to_numpy(), threads))
    numpy_dtype = getattr(series.dtype, "numpy_dtype", None)
    if numpy_dtype is None or numpy_dtype.kind not in "biuf":
        raise TypeError(f"x holds {series.dtype}; expected real numbers of at most 64 bits")
    missing = np.asarray(series.isna())
    codes = np.asarray(run(series.fillna(0).to_numpy(dtype=numpy_dtype), threads))
    codes[missing] = fill
    return codes


def _dask(x: Any, levels: Any, codes: Any, invalid: int) -> Any:
    """A lazy dask array of codes; the scheduler has the threads, so each block is decided by one."""
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


def pack_any(x: Any, levels: Any, codes: Any, *, bitorder: str = "little", invalid: int | None = None,
             out: np.ndarray | None = None, threads: int | None = None) -> Any:
    """One bit a reading, packed along the last axis as ``numpy.packbits(axis=-1)`` packs.

    Parameters
    ----------
    x : as for decide_any
        Scalars become one bit of one byte; pandas, xarray and masked objects give NumPy, dask stays lazy.
    levels : float64[m]
    codes : uint8[m + 1]
        Each 0 or 1.
    bitorder : "little" or "big"
        Whether the first reading is the lowest or the highest bit of its byte. Missing bits of the last byte are 0.
    invalid : 0 or 1, optional
        The bit of NaN. None: NaN is an error, since a bit cannot mark it.
    out : uint8[..., ceil(n / 8)], optional
    threads : int, optional

    Returns
    -------
    uint8[..., ceil(n / 8)]

    Raises
    ------
    ValueError
        Codes other than 0 and 1, another bitorder, NaN without `invalid`.
    """
    levels, codes = as_levels(levels), as_codes(codes)
    if (codes > 1).any():
        raise ValueError(f"decisions holds {codes.max()}; a bit can only tell 0 from 1")
    if bitorder not in ("little", "big"):
        raise ValueError(f"bitorder is {bitorder!r}; expected 'little' or 'big'")
    if invalid not in (None, 0, 1):
        raise ValueError(f"invalid is {invalid!r}; expected None, 0 or 1")
    if _is(x, "dask.array", "Array"):
        if out is not None:
            raise TypeError("out cannot be given with a dask Array; expected none")
        if any(c % 8 for c in x.chunks[-1][:-1]):
            raise ValueError(f"x has chunks {x.chunks[-1]} along its last axis; expected multiples of 8: rechunk it")
        return x.map_blocks(pack_any, levels, codes, bitorder=bitorder, invalid=invalid, threads=1, dtype=np.uint8,
                            chunks=(*x.chunks[:-1], tuple(-(-c // 8) for c in x.chunks[-1])))
    missing = _missing(x)
    if missing is not None:
        bits = np.asarray(decide_any(x, levels, codes, threads=threads))
        return _packed(np.ma.getdata(bits), bits == 255, bitorder, invalid, out)
    array = np.atleast_1d(as_readings(x))
    shape = (*array.shape[:-1], -(-array.shape[-1] // 8))
    if out is None:
        packed = np.empty(shape, np.uint8)
    else:
        packed = _checked_out(out, shape)
        if np.may_share_memory(array, packed):
            array = array.copy()
    lost = _core.pack(array, levels, codes, packed, bitorder == "big", invalid == 1, thread_count(threads, array.size))
    if lost and invalid is None:
        raise ValueError(f"x holds {lost} NaN, which a bit cannot mark; "
                         "pass invalid=0 or invalid=1 to choose their bit")
    return packed


def _packed(bits: np.ndarray, lost: np.ndarray, bitorder: str, invalid: int | None,
            out: np.ndarray | None) -> np.ndarray:
    """The same for codes that are there already."""
    if lost.any() and invalid is None:
        raise ValueError(f"x holds {lost.sum()} NaN or missing readings, which a bit cannot mark; "
                         "pass invalid=0 or invalid=1 to choose their bit")
    packed = np.packbits(np.where(lost, invalid or 0, bits), axis=-1, bitorder=bitorder)
    if out is None:
        return packed
    _checked_out(out, packed.shape)[...] = packed
    return out


def _checked_out(out: Any, shape: tuple[int, ...]) -> np.ndarray:
    if not isinstance(out, np.ndarray) or out.dtype != np.uint8:
        raise TypeError(f"out is {getattr(out, 'dtype', type(out).__name__)}; expected a uint8 array")
    if out.shape != shape:
        raise ValueError(f"out has shape {out.shape}; expected {shape}")
    return out


def _missing(x: Any) -> np.ndarray | None:
    """Where a masked array or a nullable pandas column lacks readings; None for all that cannot."""
    if isinstance(x, np.ma.MaskedArray):
        return np.ma.getmaskarray(x)
    if _is(x, "pandas", "Series", "Index") and not isinstance(x.dtype, np.dtype):
        return np.asarray(x.isna())
    return None


def tally_any(x: Any, levels: Any, codes: Any, truth: Any = None, decisions_count: int | None = None,
              states_count: int | None = None, store: np.ndarray | None = None,
              threads: int | None = None) -> tuple[np.ndarray, int]:
    """Counts of decisions, by true state where it is known, in the pass that decides.

    Parameters
    ----------
    x : as for decide_any
        A dask array is counted block by block where its blocks are, and only the counts travel.
    levels : float64[m]
    codes : uint8[m + 1]
        Decisions, each below `decisions_count`.
    truth : integers of the shape of x, optional
        The true state of each reading, below `states_count`.
    decisions_count, states_count : int, optional
        Rows and columns of the counts; by default as many as the codes and the truth call for.
    store : uint8 ndarray of the shape of x, optional
        Takes the codes as well (255 for NaN). Not with dask.
    threads : int, optional

    Returns
    -------
    counts : int64[decision, state], or int64[decision] without truth
    invalid : int
        NaN and missing readings, which are in none of the counts.

    Raises
    ------
    ValueError
        truth that holds other numbers than those of states, or has another shape than x.
    """
    levels, codes = as_levels(levels), as_codes(codes)
    decisions = int(codes.max()) + 1 if decisions_count is None else decisions_count
    if not 1 <= decisions <= 255:
        raise ValueError(f"the number of decisions is {decisions}; expected 1 to 255")
    if _is(x, "dask.array", "Array"):
        return _dask_tally(x, levels, codes, truth, decisions, states_count, store)
    if _is(x, "pandas", "Series") and _is(truth, "pandas", "Series") and not x.index.equals(truth.index):
        raise ValueError("truth has another index than x; expected the same readings in the same order")
    true = None if truth is None else _as_truth(truth, np.shape(x))
    states = 1 if true is None else states_count
    if true is not None and states is None:
        states = int(true.max()) + 1 if true.size else 1
    if not 1 <= states <= 255:
        raise ValueError(f"the number of states is {states}; expected 1 to 255")
    counts = np.zeros((decisions + 1, states), np.int64)
    missing = _missing(x)
    lost = 0
    if missing is not None:
        if store is not None:
            raise TypeError(f"store cannot be given with a {type(x).__name__}; expected none")
        lost = int(missing.sum())
        x = np.asarray(x.compressed() if isinstance(x, np.ma.MaskedArray) else x[~missing].to_numpy(
            dtype=x.dtype.numpy_dtype))
        true = None if true is None else true[~missing]
    array = as_readings(x)
    if store is not None and np.may_share_memory(array, store):
        array = array.copy()
    _core.tally(array, levels, codes, counts, true, store, thread_count(threads, array.size))
    invalid = int(counts[-1].sum()) + lost
    return (counts[:-1, 0] if truth is None else counts[:-1]), invalid


def tally_held_any(x: Any, levels: Any, codes: Any, width: Any, truth: Any = None, decisions_count: int | None = None,
                   states_count: int | None = None, start: Any = None,
                   threads: int | None = None) -> tuple[np.ndarray, int, Any]:
    """tally_any of the decisions that hysteresis_any makes, and where it ended.

    Returns
    -------
    counts, invalid : as from tally_any
    end : as from hysteresis_any
    """
    held, end = hysteresis_any(x, levels, codes, width, start)
    held = np.ma.getdata(np.asarray(held))
    lost = held == 255
    decisions = int(np.max(codes)) + 1 if decisions_count is None else decisions_count
    known = None if truth is None else _as_truth(truth, held.shape)[~lost]
    # a code is a reading whose levels lie between the codes
    counts, _ = tally_any(held[~lost], np.arange(1, decisions), np.arange(decisions), known, decisions, states_count,
                          threads=threads)
    return counts, int(lost.sum()), end


def _as_truth(truth: Any, shape: tuple[int, ...]) -> np.ndarray:
    array = np.asarray(truth)
    if array.size == 0:
        array = array.astype(np.uint8)
    if array.dtype.kind not in "iub":
        raise TypeError(f"truth holds {array.dtype}; expected the whole number of each reading's state")
    if array.shape != shape:
        raise ValueError(f"truth has shape {array.shape}; expected that of x, {shape}")
    return array if array.dtype.isnative else array.astype(array.dtype.newbyteorder("="))


def _dask_tally(x: Any, levels: np.ndarray, codes: np.ndarray, truth: Any, decisions: int, states_count: int | None,
                store: Any) -> tuple[np.ndarray, int]:
    """Counts of each block, summed as a tree; computed at once, since a tally is a result."""
    if store is not None:
        raise TypeError("store cannot be given with a dask Array; expected none")
    arrays = [x]
    states = 1
    if truth is not None:
        da = sys.modules["dask.array"]
        true = truth.rechunk(x.chunks) if isinstance(truth, da.Array) else da.from_array(
            _as_truth(truth, x.shape), chunks=x.chunks)
        if true.shape != x.shape:
            raise ValueError(f"truth has shape {true.shape}; expected that of x, {x.shape}")
        if true.dtype.kind not in "iub":
            raise TypeError(f"truth holds {true.dtype}; expected the whole number of each reading's state")
        states = int(true.max().compute()) + 1 if states_count is None else states_count
        arrays.append(true)
    blocks = sys.modules["dask.array"].map_blocks(
        _tally_block, *arrays, levels=levels, codes=codes, decisions=decisions, states=states, dtype=np.int64,
        new_axis=[x.ndim, x.ndim + 1], chunks=(*((1,) * n for n in x.numblocks), (decisions + 1,), (states,)),
        meta=np.empty((0,) * (x.ndim + 2), np.int64))
    counts = blocks.sum(axis=tuple(range(x.ndim))).compute()
    return (counts[:-1, 0] if truth is None else counts[:-1]), int(counts[-1].sum())


def _tally_block(x: np.ndarray, truth: np.ndarray | None = None, *, levels: np.ndarray, codes: np.ndarray,
                 decisions: int, states: int) -> np.ndarray:
    counts, invalid = tally_any(x, levels, codes, truth, decisions, states, threads=1)
    whole = np.zeros((decisions + 1, states), np.int64)
    whole[:-1] = counts.reshape(decisions, -1)
    whole[-1, 0] = invalid
    return whole.reshape((1,) * np.ndim(x) + whole.shape)


def hysteresis_any(x: Any, levels: Any, codes: Any, width: Any, start: Any = None, *, invalid: int = 255,
                   out: np.ndarray | None = None) -> tuple[Any, Any]:
    """Codes with hysteresis, along the last axis, and where each run of readings ended.

    An interval is left upwards when ``x >= level + width / 2`` and downwards when ``x < level - width / 2``.

    Parameters
    ----------
    x : as for decide_any, but in order: not dask (stream it), not xarray, not a DataFrame
    levels : float64[m]
    codes : uint8[m + 1]
    width : float or float64[m]
        Whole width of the band around each level, in the unit of the readings, at least 0.
    start : int or uint8[...], optional
        Interval (not decision: one decision can have several) in which each run starts; None or 255: the one in which
        its first number lies by the bare levels. What a call returned as `end` continues it.
    invalid : int
        Code of NaN and missing readings, which change nothing.
    out : uint8 ndarray, optional

    Returns
    -------
    codes : uint8, of the shape and kind of x
    end : int, or uint8[...] of the shape of x without its last axis
        Interval in which each run ended; 255 if it held no number yet.
    """
    if _is(x, "dask.array", "Array"):
        raise TypeError("x is a dask Array, whose blocks have no order in time: use limen.stream for hysteresis")
    if _is(x, "pandas", "DataFrame") or _is(x, "xarray", "DataArray", "Dataset", "Variable"):
        raise TypeError(f"x is a {type(x).__name__}; expected readings in order: pass its values")
    levels, codes = as_levels(levels), as_codes(codes, invalid)
    widths = np.ascontiguousarray(np.broadcast_to(np.asarray(width, np.float64), levels.shape))
    missing = _missing(x)
    if missing is not None and (missing.any() or _is(x, "pandas", "Series", "Index")):
        if missing.ndim != 1 or out is not None:
            raise TypeError("x has missing readings; expected one run of them, and no out")
        there = x.compressed() if isinstance(x, np.ma.MaskedArray) else x[~missing].to_numpy(dtype=x.dtype.numpy_dtype)
        some, end = hysteresis_any(there, levels, codes, width, start, invalid=invalid)
        result = np.full(missing.shape, invalid, np.uint8)
        result[~missing] = some
        if isinstance(x, np.ma.MaskedArray):
            return np.ma.array(result, mask=missing), end
        return _like_pandas(x, result), end
    array = as_readings(x)
    if out is not None and np.may_share_memory(array, out):
        array = array.copy()
    run = array.reshape(1) if array.ndim == 0 else array
    shape = run.shape[:-1]
    given = np.asarray(255 if start is None else start)
    if given.dtype.kind not in "iu" or (given < 0).any() or (given > 255).any():
        raise ValueError(f"start is {start!r}; expected the number of an interval")
    ends = np.array(np.broadcast_to(given, shape), np.uint8, order="C")
    result = _core.hysteresis(run, levels, widths, codes, ends, invalid,
                              out.reshape(1) if out is not None and array.ndim == 0 else out)
    end = int(ends) if ends.ndim == 0 else ends
    if array.ndim == 0:
        return (result[0] if out is None else out), end
    if _is(x, "pandas", "Series", "Index"):
        return _like_pandas(x, result), end
    return result if out is None else out, end


def _like_pandas(x: Any, codes: np.ndarray) -> Any:
    pandas = sys.modules["pandas"]
    if isinstance(x, pandas.Index):
        return pandas.Index(codes, name=x.name)
    return pandas.Series(codes, index=x.index, name=x.name)


def soft_any(x: Any, soft: Any, *, out: np.ndarray | None = None, threads: int | None = None) -> Any:
    """Soft values of the readings x, of any kind of array; what comes back is of the same kind.

    Parameters
    ----------
    x : as for decide_any
    soft : Soft
        Its table fills arrays of its dtype; `fill` marks NaN and missing readings.
    out : ndarray of that dtype and of the shape of x, optional
    threads : int, optional
    """
    if type(x) is not np.ndarray:
        special = _special(x, out, lambda a, n: soft_any(a, soft, threads=n), threads, soft.fill,
                           lambda: x.map_blocks(soft, threads=1, dtype=soft.dtype,
                                                meta=np.empty((0,) * x.ndim, soft.dtype)))
        if special is not None:
            return special
    array = as_readings(x)
    if out is None:
        result = np.empty_like(array, dtype=soft.dtype, subok=False)
    else:
        if not isinstance(out, np.ndarray) or out.dtype != soft.dtype:
            raise TypeError(f"out is {getattr(out, 'dtype', type(out).__name__)}; expected an array of {soft.dtype}")
        if out.shape != array.shape:
            raise ValueError(f"out has shape {out.shape}; expected {array.shape}")
        if np.may_share_memory(array, out):
            array = array.copy()
        result = out
    soft.table.values(array, result, soft.step or 1.0, thread_count(threads, array.size))
    return result[()] if out is None and array.ndim == 0 else result
