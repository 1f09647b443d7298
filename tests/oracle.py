"""The slow twin of slicing: twenty lines of NumPy and exact fractions that say what every decision must be."""

from bisect import bisect_right
from fractions import Fraction

import numpy as np


def exact(value):
    """A reading or level as something Python compares exactly; infinities stay floats."""
    if isinstance(value, np.longdouble) or float(value) in (float("inf"), float("-inf")):
        return float(value)
    return Fraction(int(value)) if isinstance(value, (int, np.integer, np.bool_)) else Fraction(float(value))


def decide(x, levels, codes, invalid=255):
    """codes[number of levels <= x], in exact arithmetic; `invalid` for NaN."""
    marks = [exact(level) for level in levels]
    x = np.asarray(x)
    flat = [invalid if v != v else codes[bisect_right(marks, exact(v))] for v in x.ravel()]
    return np.array(flat, np.uint8).reshape(x.shape)


def tally(codes, truth, decisions, states, invalid=255):
    """counts[decision, state] and the number of invalid codes."""
    counts = np.zeros((decisions, states), np.int64)
    keep = codes != invalid
    np.add.at(counts, (codes[keep], truth[keep]), 1)
    return counts, int((~keep).sum())


def hysteresis(x, levels, codes, width, start=None, invalid=255):
    """One reading after the other: the interval moves up past upper edges and down below lower ones."""
    interval, out = start, []
    for v in x:
        if v != v:
            out.append(invalid)
            continue
        if interval is None:
            interval = sum(v >= level for level in levels)
        while interval < len(levels) and v >= levels[interval] + width / 2:
            interval += 1
        while interval > 0 and v < levels[interval - 1] - width / 2:
            interval -= 1
        out.append(codes[interval])
    return np.array(out, np.uint8), interval
