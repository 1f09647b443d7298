"""The one table of awkward inputs: every type of reading in every layout that NumPy can make of it."""

import numpy as np
import pytest

TYPES = ["int8", "uint8", "int16", "uint16", "int32", "uint32", "int64", "uint64", "float16", "float32", "float64"]
INTEGERS = TYPES[:8]
FLOATS = TYPES[8:]


def values(dtype, size=150, seed=5):
    """Readings over the whole range and near the levels 0.385, 1.7, 6.04; floats hold every special value."""
    rng = np.random.default_rng(seed)
    dtype = np.dtype(dtype)
    if dtype.kind in "iu":
        info = np.iinfo(dtype)
        x = rng.integers(info.min, info.max, size, dtype=dtype, endpoint=True)
        x[::3] = rng.integers(0, 8, x[::3].size)
        x[:2] = info.min, info.max
        return x
    x = rng.normal(2, 3, size).astype(dtype)
    tiny = np.finfo(dtype).smallest_subnormal
    x[:9] = 0.0, -0.0, np.inf, -np.inf, np.nan, tiny, -tiny, np.finfo(dtype).max, np.finfo(dtype).min
    for i, level in enumerate((0.385, 1.7, 6.04)):
        near = dtype.type(level)
        x[9 + 3 * i:12 + 3 * i] = near, np.nextafter(near, dtype.type(np.inf)), np.nextafter(near, dtype.type(-np.inf))
    return x


def unaligned(x):
    store = np.zeros(x.nbytes + 1, np.uint8)
    view = store[1:].view(x.dtype)
    view[...] = x
    return view


LAYOUTS = {
    "contiguous": lambda x: x,
    "strided": lambda x: np.repeat(x, 3)[::3],
    "reversed": lambda x: x[::-1],
    "column": lambda x: np.stack([x, x[::-1]], 1)[:, 0],
    "field": lambda x: np.rec.fromarrays([x, np.zeros(x.size, "u1")])["f0"],
    "fortran": lambda x: np.asfortranarray(x.reshape(10, -1)),
    "transposed": lambda x: x.reshape(5, 6, -1).transpose(2, 0, 1),
    "sliced-2d": lambda x: x.reshape(10, -1)[1:7, ::2],
    "swapped": lambda x: x.astype(x.dtype.newbyteorder()),
    "swapped-strided": lambda x: np.repeat(x.astype(x.dtype.newbyteorder()), 2)[::2],
    "unaligned": unaligned,
    "read-only": lambda x: np.frombuffer(x.tobytes(), x.dtype),
    "broadcast": lambda x: np.broadcast_to(x[:1], (3, 4)),
    "empty": lambda x: x[:0],
    "empty-2d": lambda x: x[:0].reshape(0, 3),
    "one": lambda x: x[:1],
    "zero-d": lambda x: x[1].reshape(()),
}


def all_readings():
    return [pytest.param(layout, dtype, id=f"{dtype}-{layout}") for dtype in TYPES for layout in LAYOUTS]
