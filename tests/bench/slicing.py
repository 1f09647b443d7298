"""Slicing against the speed of memory: ratios within one run, so that they travel between machines.

`limit` is numpy.greater_equal(x, t, out=...) on the same array: it reads the input and writes a byte a reading. Run by
`bash tests/bench/run`; prints a table and draws tests/bench/slicing.png (with matplotlib).
"""

from __future__ import annotations

import argparse
import sys
import time
from pathlib import Path

import numpy as np

import limen as lm
from limen._arrays import decide_any, pack_any, tally_any

ROWS: list[tuple[str, float, float | None, str]] = []


def seconds(*calls, repeats=9):
    """Median time of each call; the calls take turns, so that a busy moment of the machine falls on all."""
    times = [[] for _ in calls]
    for call in calls:
        call()
    for _ in range(repeats):
        for call, taken in zip(calls, times):
            start = time.perf_counter()
            call()
            taken.append(time.perf_counter() - start)
    return [float(np.median(t)) for t in times]


def show(what, ratio, wanted=None, note=""):
    ROWS.append((what, ratio, wanted, note))
    target = f"{wanted:7.2f}" if wanted is not None else "       "
    print(f"{what:58} {ratio:9.3f} {target}  {note}", flush=True)


def readings(dtype, n, states):
    x = np.random.default_rng(0).random(n, dtype=np.float32) * states
    return (x * 1000).astype(dtype) if np.dtype(dtype).kind in "iu" else x.astype(dtype)


def levels_for(dtype, states):
    return np.arange(1.0, states) * (1000 if np.dtype(dtype).kind in "iu" else 1)


def kernels(n, threads_all):
    for dtype, states, wanted in (("float32", 2, 0.85), ("float32", 4, 0.8), ("float32", 8, 0.7), ("float32", 16, 0.5),
                                  ("float32", 32, None), ("float32", 64, None), ("float32", 255, None),
                                  ("float64", 4, 0.8), ("float64", 16, None), ("int16", 4, 0.75), ("int16", 16, None),
                                  ("float16", 4, None), ("uint8", 4, None), ("int32", 4, None), ("int64", 4, None)):
        x, levels, codes = readings(dtype, n, states), levels_for(dtype, states), np.arange(states, dtype=np.uint8)
        out, flags, mark = np.empty(n, np.uint8), np.empty(n, bool), np.dtype(dtype).type(levels[0])
        calls = [lambda: np.greater_equal(x, mark, out=flags),
                 lambda: decide_any(x, levels, codes, out=out, threads=1)]
        if states == 16 and dtype == "float32":
            calls.append(lambda: decide_any(x, levels, codes, out=out, threads=threads_all))
        limit, ours, *more = seconds(*calls)
        show(f"{dtype}, {states} states, one thread: of the limit", limit / ours, wanted, f"{ours / n * 1e9:.3f} ns")
        if more:
            show(f"{dtype}, {states} states, {threads_all} threads: of the limit", limit / more[0], 0.9)
        if states == 4 and dtype == "float32":
            spoiled = x.copy()
            spoiled[::1000] = np.nan
            clean, nan, labels = seconds(
                lambda: decide_any(x, levels, codes, out=out, threads=1),
                lambda: decide_any(spoiled, levels, codes, out=out, threads=1),
                lambda: decide_any(x, levels, codes[[2, 0, 1, 0]], out=out, threads=1))
            show("float32, 4 states, 0.1 % NaN: of that without", clean / nan, 0.9)
            show("float32, 4 states, labels: of that without", clean / labels)
            few = x[:n // 8]
            numpy_digitize, ours = seconds(lambda: np.digitize(few, levels),
                                           lambda: decide_any(few, levels, codes, out=out[:few.size], threads=1),
                                           repeats=5)
            show("float32, 4 states: times numpy.digitize", numpy_digitize / ours, 45)


def passes(n):
    x = readings("float32", n, 4)
    levels = levels_for("float32", 4)
    bits = np.empty(n // 8, np.uint8)
    largest, packed = seconds(lambda: x.max(), lambda: pack_any(x, [2.0], [0, 1], out=bits, threads=1))
    show("packed bits, 2 states: of the speed of x.max()", largest / packed, 0.7, f"{packed / n * 1e9:.3f} ns")
    truth = np.clip(x + np.random.default_rng(1).normal(0, 0.3, n).astype("f4"), 0, 3.9).astype(np.uint8)
    index = (lm.decide(x, levels, np.arange(4)) * 4 + truth).astype(np.uint8)
    counted, ours, plain = seconds(lambda: np.bincount(index, minlength=16),
                                   lambda: tally_any(x, levels, np.arange(4), truth, 4, 4, threads=1),
                                   lambda: tally_any(x, levels, np.arange(4), None, 4, threads=1), repeats=5)
    show("tally of 4 decisions in 4 states: times numpy.bincount", counted / ours, 8, f"{ours / n * 1e9:.3f} ns")
    show("tally of 4 decisions: times numpy.bincount", counted / plain, None, f"{plain / n * 1e9:.3f} ns")
    own = np.sort(np.random.default_rng(2).random((64, 3)) * 4, axis=-1)
    frames, out, flags = x.reshape(-1, 64), np.empty((n // 64, 64), np.uint8), np.empty((n // 64, 64), bool)
    limit, inner = seconds(lambda: np.greater_equal(frames, np.float32(2), out=flags),
                           lambda: decide_any(frames, own, np.arange(4), out=out, threads=1), repeats=5)
    show("64 channels with their own 3 levels, interleaved", limit / inner, 0.25)
    rows = x.reshape(64, -1)
    out, flags = out.reshape(64, -1), flags.reshape(64, -1)
    limit, outer = seconds(lambda: np.greater_equal(rows, np.float32(2), out=flags),
                           lambda: decide_any(rows, own[:, None, :], np.arange(4), out=out, threads=1), repeats=5)
    show("64 channels with their own 3 levels, one after the other", limit / outer, 0.25)


def overhead():
    ten, one = np.arange(10.0), 1.5
    levels, codes = np.array([2.5, 5.5]), np.array([0, 1, 2], np.uint8)
    few, scalar, listed = seconds(lambda: decide_any(ten, levels, codes), lambda: decide_any(one, levels, codes),
                                  lambda: decide_any([1, 2, 3], levels, codes), repeats=2000)
    show("ten readings: microseconds", few * 1e6, 50)
    show("a Python float: microseconds", scalar * 1e6, 50)
    show("a list of three: microseconds", listed * 1e6, 50)


def main():
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--readings", type=int, default=32_000_000)
    parser.add_argument("--quick", action="store_true", help="a tenth of the readings, no picture")
    options = parser.parse_args()
    n = options.readings // (10 if options.quick else 1) // 64 * 64
    info = lm.build_info()
    print(f"limen {info['version']}, kernels {info['kernels']}, {info['threads']} threads, {n} readings\n"
          f"{'':58} {'measured':>9} {'wanted':>7}")
    kernels(n, info["threads"])
    passes(n)
    overhead()


if __name__ == "__main__":
    sys.path.insert(0, str(Path(__file__).parent))
    main()
