"""Slicing against the speed of memory: ratios within one run, so that they travel between machines.

`limit` is numpy.greater_equal(x, t, out=...) on the same array: it reads the input and writes a byte a reading. Run by
`bash tests/bench/run`; prints a table and draws tests/bench/slicing.png (with matplotlib).
"""

from __future__ import annotations

import argparse
import os
import tempfile
import time
from pathlib import Path

import numpy as np

import limen as lm
from limen._arrays import decide_any, pack_any, tally_any
from limen.streaming import stream, tally_stream

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


def soft(n):
    """LLR of two two-part mixtures against a copy, and its error."""
    states = lm.States({"a": lm.mixture([0.9, 0.1], [lm.gaussian(0, 1), lm.gaussian(0.5, 4)]),
                        "b": lm.mixture([0.8, 0.2], [lm.gaussian(3, 0.7), lm.gaussian(2.5, 3)])})
    llr = states.soft("a", "b")
    x = np.random.default_rng(3).normal(1.5, 3, n).astype(np.float32)
    out, copied = np.empty_like(x), np.empty_like(x)
    copy, ours = seconds(lambda: np.copyto(copied, x), lambda: llr(x, out=out, threads=1), repeats=5)
    show("LLR of two mixtures, float32: of numpy.copyto", copy / ours, 0.2, f"{ours / n * 1e9:.2f} ns")
    every = np.arange(0, 2**32, 2**32 // 400_000, dtype=np.uint64).astype(np.uint32).view(np.float32)
    every = np.concatenate([every[np.isfinite(every)], np.linspace(-30, 30, 400_000, dtype=np.float32)])
    exact = llr.exact(every)
    with np.errstate(over="ignore"):
        finite = np.isfinite(exact.astype(np.float32))
    worst = np.max(np.abs(llr(every) - exact)[finite] / np.maximum(1, np.abs(exact[finite])))
    show("its worst error over float32, relative to max(1, |LLR|)", worst, None, f"{worst:.2e}; promised 1e-6")


def overhead():
    ten, one = np.arange(10.0), 1.5
    levels, codes = np.array([2.5, 5.5]), np.array([0, 1, 2], np.uint8)
    few, scalar, listed = seconds(lambda: decide_any(ten, levels, codes), lambda: decide_any(one, levels, codes),
                                  lambda: decide_any([1, 2, 3], levels, codes), repeats=2000)
    show("ten readings: microseconds", few * 1e6, 50)
    show("a Python float: microseconds", scalar * 1e6, 50)
    show("a list of three: microseconds", listed * 1e6, 50)


RULE = lm.rule([1.0, 2.0, 3.0], [0, 1, 2, 3], list("abcd"))


def resident(field="VmRSS"):
    """Megabytes of this process."""
    with open("/proc/self/status") as status:
        return next(int(line.split()[1]) for line in status if line.startswith(field)) / 1024


def streams(size):
    """A recording on disk, mapped: as fast as summing it, and never in memory as a whole."""
    with tempfile.TemporaryDirectory() as folder:
        path = os.path.join(folder, "recording.raw")
        part = readings("float32", 1 << 22, 4)
        with open(path, "wb") as file:
            for _ in range(max(1, size // part.nbytes)):
                file.write(part.data)
            file.flush()
            os.fsync(file.fileno())  # else the disk is still busy with it below
        mapped = np.memmap(path, np.float32, "r")
        with open("/proc/self/clear_refs", "w") as peak:
            peak.write("5")
        before = resident()
        codes = os.path.join(folder, "codes.raw")
        tally = tally_stream(RULE, mapped)
        stream(RULE, mapped, codes)
        grown = resident("VmHWM") - before
        # each opens the file anew: pages that are mapped already cost nothing to read again
        summing, counting, deciding = seconds(lambda: np.memmap(path, np.float32, "r").sum(),
                                              lambda: tally_stream(RULE, path, dtype=np.float32),
                                              lambda: stream(RULE, path, codes, dtype=np.float32), repeats=3)
        note = f"{mapped.nbytes / 1e9:.1f} GB, {tally.total / counting / 1e9:.2f} G readings/s"
        show("tally of a memmap: of the speed of summing it", summing / counting, 0.9, note)
        show("codes of a memmap to a file: of the speed of summing it", summing / deciding)
        show("megabytes of memory above the start", grown, 200)


def growth(most):
    """Nanoseconds a reading from 1e5 readings on, by stream from one chunk given again and again."""
    part = readings("float32", 1 << 20, 4)
    n = 100_000
    while n <= most:
        def chunks(left=n):
            while left > 0:
                yield part[:left]
                left -= part.size
        start = time.perf_counter()
        assert tally_stream(RULE, chunks()).total == n
        show(f"{n:.0e} readings by stream: ns a reading", (time.perf_counter() - start) / n * 1e9)
        n *= 10


def picture(path):
    """Readings per second against levels and against size, with the speed of one comparison drawn in."""
    import matplotlib

    matplotlib.use("Agg")
    from matplotlib import pyplot as plt

    def speeds(x, counts_of_levels):
        out, flags = np.empty(x.size, np.uint8), np.empty(x.size, bool)
        result = []
        for count in counts_of_levels:
            levels = np.linspace(0, 4, count + 2)[1:-1]
            codes = np.arange(count + 1, dtype=np.uint8)
            limit, ours = seconds(lambda: np.greater_equal(x, x.dtype.type(2), out=flags),
                                  lambda: decide_any(x, levels, codes, out=out, threads=1), repeats=5)
            result.append((x.size / limit, x.size / ours))
        return np.array(result) / 1e9

    figure, (left, right) = plt.subplots(1, 2, figsize=(10, 4), layout="constrained", sharey=True)
    counts = [1, 2, 3, 7, 15, 16, 31, 63, 127, 254]
    for dtype in ("float32", "float64", "int16"):
        x = readings(dtype, 8_000_000, 4)
        if dtype == "int16":
            x //= 1000
        values = speeds(x, counts)
        line, = left.plot(counts, values[:, 1], "o-", label=dtype)
        left.axhline(np.median(values[:, 0]), color=line.get_color(), ls=":")
    sizes = [1000, 10_000, 100_000, 1_000_000, 10_000_000, 32_000_000]
    values = np.array([speeds(readings("float32", n, 4), [3])[0] for n in sizes])
    right.plot(sizes, values[:, 1], "o-", label="float32, 3 levels")
    right.plot(sizes, values[:, 0], ":", color="C0", label="one comparison by NumPy")
    left.set(xscale="log", xlabel="levels", ylabel="readings per nanosecond", ylim=(0, None),
             title="one thread, 8 million readings; dotted: one comparison")
    right.set(xscale="log", xlabel="readings", title="by size")
    left.legend()
    right.legend()
    figure.savefig(path)
    print(f"picture: {path}")


def main():
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--readings", type=int, default=32_000_000)
    parser.add_argument("--file", type=float, default=4.0, help="gigabytes of the recording that is streamed")
    parser.add_argument("--most", type=float, default=1e9, help="readings of the longest stream")
    parser.add_argument("--quick", action="store_true", help="a tenth of everything")
    options = parser.parse_args()
    part = 10 if options.quick else 1
    n = options.readings // part // 64 * 64
    info = lm.build_info()
    print(f"limen {info['version']}, kernels {info['kernels']}, {info['threads']} threads, {n} readings\n"
          f"{'':58} {'measured':>9} {'wanted':>7}")
    kernels(n, info["threads"])
    passes(n)
    soft(n)
    overhead()
    growth(options.most / part)
    streams(int(options.file * 2**30) // part)
    picture(Path(__file__).with_name("slicing.png"))


if __name__ == "__main__":
    main()
