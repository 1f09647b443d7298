"""Recordings larger than memory: a rule applied chunk by chunk, from any source to any sink, resumable."""

from __future__ import annotations

import hashlib
import json
import math
import mmap
import os
import time
from collections.abc import Callable, Iterator
from contextlib import closing, contextmanager
from pathlib import Path
from typing import Any

import numpy as np

from ._arrays import as_codes, as_levels, as_readings, decide_any, hysteresis_any, tally_any, tally_held_any
from ._progress import progress_of
from .tallies import Tally

__all__ = ["stream", "tally_stream"]

CHUNK = 1 << 23         # readings: 32 MB of float32
RECORD_EVERY = 0.5      # seconds between records of how far a run has got
RECORD = "limen stream"


def stream(rule: Any, source: Any, sink: Any = None, *, chunk: int = CHUNK, progress: Any = True, resume: bool = False,
           dtype: Any = None, offset: int = 0, threads: int | None = None) -> Any:
    """Apply a rule to a recording of any length in bounded memory.

    Parameters
    ----------
    rule : Rule
        With or without hysteresis, whose state runs on from chunk to chunk.
    source : array, path or iterable
        A memmap, h5py dataset, zarr array, or anything else with a shape that can be sliced along its first axis; the
        path of a ``.npy`` file, or of a raw file together with `dtype`; or an iterable of chunks.
    sink : array, path, callable or binary file, optional
        Where the uint8 codes go: something of the shape of the source that can be assigned to by slices; a path (a
        ``.npy`` file by its suffix, else raw bytes); ``sink(codes)``, called with each chunk; or ``sink.write``.
        None returns the codes.
    chunk : int
        Readings at a time.
    progress : bool or callable(done, total)
        A bar when somebody looks at a terminal or notebook, or a function of your own.
    resume : bool
        Go on where an interrupted run stopped. Paths, memmaps, h5py and zarr sinks keep a record of that: a file
        ``<sink>.progress`` or an attribute, which is removed when the run is complete.
    dtype, offset : optional
        Type of the readings of a raw file, and the number of bytes before the first.
    threads : int, optional
        As in ``Rule.decide``.

    Returns
    -------
    uint8 ndarray, or the sink

    Raises
    ------
    FileExistsError
        The sink holds an interrupted run and `resume` was not asked for.
    ValueError
        A file shorter than it should be, a sink of another shape, a record of another rule or recording.

    Examples
    --------
    >>> import limen as lm, numpy as np
    >>> np.arange(6, dtype="int16").tofile("recording.raw")
    >>> rule = lm.rule([2.5], [0, 1], ["low", "high"])
    >>> lm.stream(rule, "recording.raw", "codes.npy", dtype="int16")
    'codes.npy'
    >>> np.load("codes.npy").tolist()
    [0, 0, 0, 1, 1, 1]
    """
    readings = _open_source(source, dtype, offset, "source")
    decide = _Decider(rule, threads)
    key = {"rule": decide.key, "shape": list(readings.shape) if readings.shape is not None else None}
    target = _open_sink(sink, readings)
    record = _Record(target.record, key, resume)
    decide.state = record.state
    with closing(target), record.kept(target.flush), \
            progress_of(progress, readings.length, done=record.done, title="slicing") as advance:
        target.start(record.done)
        for block in readings.chunks(chunk, record.done):
            target.take(record.done, block, decide)
            readings.forget(block)
            record.step(block.shape[0], decide.state)
            advance(block.shape[0])
        target.finish(record.done)
    return target.result


def tally_stream(rule: Any, source: Any, truth: Any = None, *, states: Any = None, chunk: int = CHUNK,
                 progress: Any = True, checkpoint: Any = None, resume: bool = False, dtype: Any = None,
                 offset: int = 0, truth_dtype: Any = None, threads: int | None = None) -> Tally:
    """Count the decisions of a rule over a recording of any length, by true state where it is known.

    Parameters
    ----------
    rule, source, chunk, progress, dtype, offset, threads
        As in `stream`; an iterable gives chunks of readings, or pairs (readings, truth) when `truth` is True.
    truth : array or path, optional
        The true state of each reading, as whole numbers; a source like `source`.
    states : sequence of str, optional
        Names of the states; by default those of the decisions.
    checkpoint : path, optional
        File that keeps the tally of an interrupted run; removed when the run is complete.
    resume : bool
        Go on from the checkpoint.
    truth_dtype : optional
        Type of a raw file of truths.

    Returns
    -------
    Tally

    Examples
    --------
    >>> import limen as lm, numpy as np
    >>> rule = lm.rule([2.5], [0, 1], ["low", "high"])
    >>> lm.tally_stream(rule, ([1.0, 2.0], [3.0, np.nan])).counts.tolist()
    [2, 1]
    """
    pairs = truth is True
    readings = _open_source(source, dtype, offset, "source", pairs)
    true = _open_source(truth, truth_dtype, 0, "truth") if truth is not None and not pairs else None
    if true is not None and true.shape != readings.shape:
        raise ValueError(f"truth has shape {true.shape}; expected that of source, {readings.shape}")
    decide = _Decider(rule, threads)
    names = decide.names
    columns = len(states) if states is not None else len(names)
    key = {"rule": decide.key, "shape": list(readings.shape) if readings.shape is not None else None}
    record = _Record(None if checkpoint is None else _FileRecord(Path(checkpoint)), key, resume)
    shape = (len(names), columns) if truth is not None else (len(names),)
    state = record.state or {"interval": None, "counts": np.zeros(shape, int).tolist(), "invalid": 0}
    decide.state = state["interval"]
    truths = true.chunks(chunk, record.done) if true is not None else None
    with record.kept(lambda: None), \
            progress_of(progress, readings.length, done=record.done, title="counting") as advance:
        for block in readings.chunks(chunk, record.done):
            block, known = block if pairs else (block, next(truths) if truths is not None else None)
            counts, invalid = decide.tally(block, known, len(names), columns)
            readings.forget(block)
            if true is not None:
                true.forget(known)
            state = {"interval": decide.state, "counts": (counts + state["counts"]).tolist(),
                     "invalid": invalid + state["invalid"]}
            record.step(block.shape[0], state)
            advance(block.shape[0])
    return Tally(state["counts"], state["invalid"], names,
                 (states if states is not None else names) if truth is not None else None)


# ---- the rule ----

class _Decider:
    """A rule as this file needs it: codes of a chunk, with the state of hysteresis between chunks."""

    def __init__(self, rule: Any, threads: int | None):
        self.levels, self.codes = as_levels(rule.levels), as_codes(rule.decisions, rule.invalid)
        self.invalid, self.width, self.threads = rule.invalid, getattr(rule, "width", None), threads
        self.names = tuple(rule.names)
        self.state: Any = None
        content = [self.levels.tobytes(), self.codes.tobytes(), repr((self.invalid, self.width)).encode()]
        self.key = hashlib.sha256(b"|".join(content)).hexdigest()[:16]

    def __call__(self, x: np.ndarray, out: np.ndarray | None = None) -> np.ndarray:
        if self.width is None:
            return decide_any(x, self.levels, self.codes, invalid=self.invalid, out=out, threads=self.threads)
        runs = np.moveaxis(x, 0, -1)  # time is the first axis here
        codes, end = hysteresis_any(runs, self.levels, self.codes, self.width, self.state, invalid=self.invalid,
                                    out=None if out is None else np.moveaxis(out, 0, -1))
        self.state = end if isinstance(end, int) else end.tolist()
        return np.moveaxis(codes, -1, 0)

    def tally(self, x: np.ndarray, truth: Any, decisions: int, states: int) -> tuple[np.ndarray, int]:
        if self.width is None:
            return tally_any(x, self.levels, self.codes, truth, decisions, states, threads=self.threads)
        runs = np.moveaxis(x, 0, -1)
        known = None if truth is None else np.moveaxis(np.asarray(truth), 0, -1)
        counts, lost, end = tally_held_any(runs, self.levels, self.codes, self.width, known, decisions, states,
                                           self.state, self.threads)
        self.state = end if isinstance(end, int) else end.tolist()
        return counts, lost


# ---- sources ----

class _Source:
    """Something with a length, sliced along its first axis."""

    def __init__(self, array: Any, name: str):
        self.array, self.name = array, name
        self.shape = tuple(array.shape)
        self.length: int | None = self.shape[0]

    def chunks(self, chunk: int, start: int) -> Iterator[Any]:
        rows = _rows(chunk, self.shape[1:])
        for at in range(start, self.shape[0], rows):
            end = min(at + rows, self.shape[0])
            block = as_readings(self.array[at:end])
            if block.shape[0] != end - at:
                raise ValueError(f"{self.name} gave {block.shape[0]} readings at {at}; expected {end - at}")
            yield block

    def forget(self, block: Any) -> None:
        """Lets the pages of a mapped file go that were read, so that a long recording does not fill the memory."""
        if isinstance(self.array, np.memmap) and self.array.mode != "c":  # private changes would be lost
            _release(self.array._mmap, block)


class _Iterated(_Source):
    """Chunks from an iterable, its length not known."""

    def __init__(self, chunks: Any, name: str, pairs: bool):
        self.iterator, self.name, self.pairs = iter(chunks), name, pairs
        self.shape, self.length, self.array = None, None, None

    def chunks(self, chunk: int, start: int) -> Iterator[Any]:
        for item in self.iterator:
            if self.pairs:
                try:
                    item, truth = item
                except (TypeError, ValueError):
                    raise ValueError(f"{self.name} gave a {type(item).__name__}; "
                                     "expected pairs (readings, truth)") from None
                truth = np.asarray(truth)
            block = np.atleast_1d(as_readings(item))
            skip = min(start, block.shape[0])
            start -= skip
            block = block[skip:]
            rows = _rows(chunk, block.shape[1:])
            for at in range(0, block.shape[0], rows):
                part = block[at:at + rows]
                yield (part, truth[skip + at:skip + at + rows]) if self.pairs else part

    def forget(self, block: Any) -> None:
        pass


def _rows(chunk: int, tail: tuple[int, ...]) -> int:
    if isinstance(chunk, bool) or not isinstance(chunk, (int, np.integer)) or chunk < 1:
        raise ValueError(f"chunk is {chunk!r}; expected a whole number of at least 1")
    return max(1, int(chunk) // max(1, math.prod(tail)))


def _release(memory: mmap.mmap, block: np.ndarray) -> None:
    """Tells the system that the whole pages under a block are not needed; they stay in the file and its cache."""
    if not hasattr(mmap, "MADV_DONTNEED") or block.size == 0:
        return
    start = np.frombuffer(memory, np.uint8).ctypes.data
    low, high = np.lib.array_utils.byte_bounds(block)
    low, high = max(0, low - start), min(len(memory), high - start)
    low -= low % mmap.PAGESIZE  # the page before is read through already
    if high > low:
        memory.madvise(mmap.MADV_DONTNEED, low, high - low)


def _open_source(source: Any, dtype: Any, offset: int, name: str, pairs: bool = False) -> _Source:
    if isinstance(source, (str, os.PathLike)):
        return _Source(_map_file(Path(source), dtype, offset), name)
    if dtype is not None or offset:
        raise ValueError(f"dtype and offset describe a raw file, and {name} is a {type(source).__name__}; "
                         "expected neither")
    if not pairs and hasattr(source, "shape") and hasattr(source, "__getitem__"):
        if len(source.shape) == 0:
            raise ValueError(f"{name} is a single number; expected a recording")
        return _Source(source.to_numpy() if hasattr(source, "iloc") else source, name)
    if hasattr(source, "__iter__"):
        return _Iterated(source, name, pairs)
    raise TypeError(f"{name} is a {type(source).__name__}; expected an array, a path or an iterable of chunks")


def _map_file(path: Path, dtype: Any, offset: int) -> np.ndarray:
    """A file as a read-only memmap; a sentence says what is wrong with it otherwise."""
    size = path.stat().st_size
    if dtype is None:
        if path.suffix != ".npy":
            raise ValueError(f"{path} is no .npy file; expected dtype, the type of its readings")
        try:
            array = np.load(path, mmap_mode="r", allow_pickle=False)
        except (ValueError, EOFError) as error:
            raise ValueError(f"{path} ({size} bytes) cannot be read: it is damaged or shorter than its header says "
                             f"({error})") from error
        if array.ndim == 0:
            raise ValueError(f"{path} holds a single number; expected a recording")
        return array
    kind = np.dtype(dtype)
    if offset < 0 or offset > size:
        raise ValueError(f"offset is {offset}; expected 0 to {size}, the size of {path}")
    if (size - offset) % kind.itemsize:
        raise ValueError(f"{path} holds {size - offset} bytes; expected a multiple of {kind.itemsize}, one {kind} "
                         "each: it is cut short, or of another type")
    if size == offset:
        return np.empty(0, kind)
    return np.memmap(path, kind, "r", offset)


# ---- sinks ----

class _Sink:
    """Takes codes in order. record: where the progress of a run is kept, or None."""

    record: Any = None
    result: Any = None

    def start(self, done: int) -> None:
        """Before the first chunk; done readings are there already."""

    def take(self, at: int, block: np.ndarray, decide: _Decider) -> None:
        raise NotImplementedError

    def flush(self) -> None:
        """Before a record is written that counts on what was taken."""

    def finish(self, length: int) -> None:
        """After the last chunk."""

    def close(self) -> None:
        """At the end of any run, complete or not."""


class _ArraySink(_Sink):
    def __init__(self, array: Any, readings: _Source):
        self.array = self.result = array
        if readings.shape is not None and tuple(array.shape) != readings.shape:
            raise ValueError(f"sink has shape {tuple(array.shape)}; expected that of source, {readings.shape}")
        if np.dtype(array.dtype) != np.uint8:
            raise TypeError(f"sink holds {array.dtype}; expected uint8")
        if hasattr(array, "attrs"):
            self.record = _AttributeRecord(array.attrs)
        elif isinstance(array, np.memmap) and array.filename is not None:
            self.record = _FileRecord(Path(str(array.filename) + ".progress"))

    def take(self, at: int, block: np.ndarray, decide: _Decider) -> None:
        end = at + block.shape[0]
        if end > self.array.shape[0]:
            raise ValueError(f"sink has room for {self.array.shape[0]} readings; source gave more")
        if isinstance(self.array, np.ndarray):
            part = self.array[at:end]
            decide(block, part)
            if isinstance(self.array, np.memmap):
                _release(self.array._mmap, part)
        else:
            self.array[at:end] = decide(block)

    def flush(self) -> None:
        if isinstance(self.array, np.memmap):
            self.array.flush()
        elif hasattr(getattr(self.array, "file", None), "flush"):
            self.array.file.flush()


class _MemorySink(_Sink):
    """The codes as an array, when the length is known beforehand or not."""

    def __init__(self, readings: _Source):
        self.whole = np.empty(readings.shape, np.uint8) if readings.shape is not None else None
        self.parts: list[np.ndarray] = []

    def take(self, at: int, block: np.ndarray, decide: _Decider) -> None:
        if self.whole is not None:
            decide(block, self.whole[at:at + block.shape[0]])
        else:
            self.parts.append(decide(block))

    def finish(self, length: int) -> None:
        self.result = self.whole if self.whole is not None else \
            np.concatenate(self.parts) if self.parts else np.empty(0, np.uint8)


class _CallSink(_Sink):
    def __init__(self, call: Callable[[np.ndarray], Any], result: Any):
        self.call, self.result = call, result

    def take(self, at: int, block: np.ndarray, decide: _Decider) -> None:
        self.call(decide(block))


class _FileSink(_Sink):
    """A .npy or raw file that grows; a .npy header says the final shape from the start where it is known."""

    def __init__(self, path: Any, readings: _Source):
        self.path, self.result = Path(path), path
        self.npy = self.path.suffix == ".npy"
        self.tail = readings.shape[1:] if readings.shape is not None else None
        self.length = readings.length
        self.record = _FileRecord(Path(str(path) + ".progress"))
        self.file: Any = None
        self.buffer = np.empty(0, np.uint8)
        self.header = 0

    def start(self, done: int) -> None:
        if done and not self.path.exists():
            raise ValueError(f"{self.path} is gone; expected the {done} codes that its record speaks of")
        self.file = open(self.path, "r+b" if done else "wb")
        if self.tail is not None:
            self._go_to(done)

    def _go_to(self, done: int) -> None:
        """Writes the header and stands behind the codes that are done."""
        if self.npy:
            self._write_header(self.length or 0)
        end = self.header + done * math.prod(self.tail or ())
        size = self.file.seek(0, os.SEEK_END)
        if size < end:
            raise ValueError(f"{self.path} holds {size} bytes; expected at least {end} after {done} readings")
        self.file.truncate(end)
        self.file.seek(end)

    def _write_header(self, length: int) -> None:
        """NumPy leaves room for the first axis to grow, so the header keeps its size."""
        self.file.seek(0)
        np.lib.format.write_array_header_1_0(
            self.file, {"descr": "|u1", "fortran_order": False, "shape": (length, *(self.tail or ()))})
        if self.header and self.file.tell() != self.header:
            raise ValueError(f"{self.path} has no room for the length of its header")
        self.header = self.file.tell()

    def take(self, at: int, block: np.ndarray, decide: _Decider) -> None:
        if self.tail is None:
            self.tail = block.shape[1:]
            self._go_to(at)
        if self.buffer.size < block.size:
            self.buffer = np.empty(block.size, np.uint8)
        self.file.write(decide(block, self.buffer[:block.size].reshape(block.shape)).data)

    def flush(self) -> None:
        if self.file is not None:
            self.file.flush()

    def finish(self, length: int) -> None:
        if self.npy:
            self.tail = self.tail or ()
            self._write_header(length)

    def close(self) -> None:
        if self.file is not None:
            self.file.close()


def _open_sink(sink: Any, readings: _Source) -> _Sink:
    if sink is None:
        return _MemorySink(readings)
    if isinstance(sink, (str, os.PathLike)):
        return _FileSink(sink, readings)
    if hasattr(sink, "shape") and hasattr(sink, "__setitem__"):
        return _ArraySink(sink, readings)
    if hasattr(sink, "write"):
        return _CallSink(lambda codes: sink.write(np.ascontiguousarray(codes).data), sink)
    if callable(sink):
        return _CallSink(lambda codes: sink(codes), sink)
    raise TypeError(f"sink is a {type(sink).__name__}; expected an array, a path, a callable or a binary file")


# ---- how far a run has got ----

class _FileRecord:
    def __init__(self, path: Path):
        self.path, self.place = path, str(path)

    def read(self) -> str | None:
        return self.path.read_text() if self.path.exists() else None

    def write(self, text: str) -> None:
        beside = Path(f"{self.path}.new")
        beside.write_text(text)
        beside.replace(self.path)

    def remove(self) -> None:
        self.path.unlink(missing_ok=True)


class _AttributeRecord:
    place = "the sink's attribute limen_stream"

    def __init__(self, attributes: Any):
        self.attributes = attributes

    def read(self) -> str | None:
        return self.attributes.get("limen_stream")

    def write(self, text: str) -> None:
        self.attributes["limen_stream"] = text

    def remove(self) -> None:
        if "limen_stream" in self.attributes:
            del self.attributes["limen_stream"]


class _Record:
    """Readings done and the state after them, kept beside the sink while a run is incomplete."""

    def __init__(self, store: Any, key: dict, resume: bool):
        self.store, self.key, self.written = store, key, time.monotonic()
        self.at: tuple[int, Any] = (0, None)  # one assignment moves both: Ctrl-C cannot come between
        text = store.read() if store is not None else None
        if resume and store is None:
            raise ValueError("resume is True; expected a sink (or checkpoint) that keeps a record")
        if text is None:
            return
        if not resume:
            raise FileExistsError(f"{store.place} records an interrupted run; pass resume=True to go on, or remove it")
        try:
            saved = json.loads(text)
            found = {name: saved[name] for name in key}
            self.at = (saved["done"], saved["state"])
            if saved["format"] != RECORD or not isinstance(self.done, int) or self.done < 0:
                raise ValueError
        except (ValueError, KeyError, TypeError):
            raise ValueError(f"{store.place} is no record of a run; remove it to start anew") from None
        if found != key:
            raise ValueError(f"{store.place} records a run of another rule or over a source of another shape; "
                             "remove it to start anew")

    @property
    def done(self) -> int:
        return self.at[0]

    @property
    def state(self) -> Any:
        return self.at[1]

    @contextmanager
    def kept(self, flush: Callable[[], None]) -> Iterator[None]:
        """Writes the record now, from time to time, and when the run is interrupted; removes it when it is complete."""
        self.flush = flush
        self._write()
        try:
            yield
        except BaseException:
            self._write()
            raise
        if self.store is not None:
            self.store.remove()

    def _write(self) -> None:
        if self.store is not None:
            self.flush()
            self.store.write(json.dumps({"format": RECORD, "version": 1, "done": self.done, "state": self.state,
                                         **self.key}))
        self.written = time.monotonic()

    def step(self, count: int, state: Any) -> None:
        self.at = (self.done + count, state)
        if time.monotonic() - self.written > RECORD_EVERY:
            self._write()
