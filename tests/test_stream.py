"""Streams: any source to any sink equals one call; memory stays bounded; interrupted runs go on."""

import io
import json
import os
import subprocess
import sys

import numpy as np
import pytest

import limen as lm
from limen._arrays import decide_any, hysteresis_any, tally_any
from limen.streaming import stream, tally_stream

RULE = lm.rule([0.4, 1.7], [1, 0, 2], ["a", "b", "c"])
SLOW = RULE.with_hysteresis(0.8)
X = np.random.default_rng(1).normal(1, 1, 10_007).astype(np.float32)
X[::97] = np.nan
CODES = decide_any(X, RULE.levels, RULE.decisions)
TRUTH = np.random.default_rng(2).integers(0, 3, X.size).astype(np.uint8)
COUNTS, INVALID = tally_any(X, RULE.levels, RULE.decisions, TRUTH, 3, 3)


class Stop(Exception):
    pass


def stop_after(count):
    """A progress function that interrupts once so many readings are done."""
    def progress(done, total):
        if done >= count:
            raise Stop
    return progress


@pytest.fixture
def sources(tmp_path):
    np.save(tmp_path / "x.npy", X)
    X.tofile(tmp_path / "x.raw")
    with open(tmp_path / "x.head", "wb") as f:
        f.write(b"header.")
        f.write(X.tobytes())
    return {
        "array": (X, {}),
        "memmap": (np.memmap(tmp_path / "x.raw", np.float32, "r"), {}),
        "npy": (tmp_path / "x.npy", {}),
        "raw": (str(tmp_path / "x.raw"), {"dtype": "f4"}),
        "offset": (tmp_path / "x.head", {"dtype": "f4", "offset": 7}),
        "chunks": ((X[i:i + 700] for i in range(0, X.size, 700)), {}),
        "list": (list(X.reshape(-1, 1)[:, 0]), {}),
    }


@pytest.mark.parametrize("name", ["array", "memmap", "npy", "raw", "offset", "chunks", "list"])
def test_every_source(sources, name, tmp_path):
    source, options = sources[name]
    got = stream(RULE, source, chunk=1000, **options)
    assert got.dtype == np.uint8
    np.testing.assert_array_equal(got, CODES)


@pytest.mark.parametrize("name", ["array", "memmap", "npy", "raw", "offset"])
def test_every_source_counts(sources, name):
    source, options = sources[name]
    t = tally_stream(RULE, source, TRUTH, chunk=1000, **options)
    assert t == lm.Tally(COUNTS, INVALID, RULE.names)
    assert tally_stream(RULE, source, chunk=999, **options) == lm.Tally(COUNTS.sum(1), INVALID, RULE.names)


def test_pairs_of_readings_and_truth():
    pairs = ((X[i:i + 700], TRUTH[i:i + 700]) for i in range(0, X.size, 700))
    assert tally_stream(RULE, pairs, True, chunk=300).counts.tolist() == COUNTS.tolist()
    with pytest.raises(ValueError, match="pairs"):
        tally_stream(RULE, [1.0, 2.0], True)


@pytest.mark.parametrize("source", ["array", "chunks"])
def test_every_sink(sources, source, tmp_path):
    def fresh():
        return (X[i:i + 700] for i in range(0, X.size, 700)) if source == "chunks" else X

    assert stream(RULE, fresh(), tmp_path / "c.npy", chunk=1000) == tmp_path / "c.npy"
    np.testing.assert_array_equal(np.load(tmp_path / "c.npy"), CODES)
    stream(RULE, fresh(), str(tmp_path / "c.raw"), chunk=1000)
    np.testing.assert_array_equal(np.fromfile(tmp_path / "c.raw", np.uint8), CODES)
    for sink in (np.zeros(X.size, np.uint8), np.memmap(tmp_path / "c.map", np.uint8, "w+", shape=X.shape)):
        assert stream(RULE, fresh(), sink, chunk=1000) is sink
        np.testing.assert_array_equal(sink, CODES)
    parts, file = [], io.BytesIO()
    stream(RULE, fresh(), parts.append, chunk=1000)
    np.testing.assert_array_equal(np.concatenate(parts), CODES)
    stream(RULE, fresh(), file, chunk=1000)
    assert file.getvalue() == CODES.tobytes()
    assert not list(tmp_path.glob("*.progress"))


def test_h5py_and_zarr(tmp_path):
    h5py = pytest.importorskip("h5py")
    with h5py.File(tmp_path / "x.h5", "w") as file:
        source = file.create_dataset("x", data=X, chunks=(512,))
        sink = file.create_dataset("codes", X.shape, "u1")
        with pytest.raises(Stop):
            stream(RULE, source, sink, chunk=1000, progress=stop_after(3000))
        assert json.loads(sink.attrs["limen_stream"])["done"] >= 2000
        stream(RULE, source, sink, chunk=1000, resume=True)
        np.testing.assert_array_equal(sink[:], CODES)
        assert "limen_stream" not in sink.attrs
        assert tally_stream(RULE, source, TRUTH, chunk=1000).counts.tolist() == COUNTS.tolist()


def test_zarr(tmp_path):
    zarr = pytest.importorskip("zarr", minversion="3.0")
    source = zarr.create_array(str(tmp_path / "x.zarr"), shape=X.shape, dtype="f4", chunks=(512,))
    source[:] = X
    sink = zarr.create_array(str(tmp_path / "c.zarr"), shape=X.shape, dtype="u1", chunks=(512,))
    with pytest.raises(Stop):
        stream(RULE, source, sink, chunk=1024, progress=stop_after(3000))
    with pytest.raises(FileExistsError, match="resume"):
        stream(RULE, source, sink, chunk=1024)
    stream(RULE, source, sink, chunk=1024, resume=True)
    np.testing.assert_array_equal(sink[:], CODES)


@pytest.mark.parametrize("rule", [RULE, SLOW], ids=["plain", "hysteresis"])
@pytest.mark.parametrize("name", ["c.npy", "c.raw"])
@pytest.mark.parametrize("form", ["array", "two", "iterable"])
def test_an_interrupted_run_goes_on(tmp_path, rule, name, form):
    """Stopped by an exception, then killed in the middle of a write: what is past the record is written anew."""
    x = X if form != "two" else X[:10_000].reshape(-1, 2)

    def source():
        return (x[i:i + 333] for i in range(0, len(x), 333)) if form == "iterable" else x

    whole = stream(rule, x)
    sink = tmp_path / name
    with pytest.raises(Stop):
        stream(rule, source(), sink, chunk=1000, progress=stop_after(3000))
    with open(sink, "ab") as file:
        file.write(b"half a chunk")
    with pytest.raises(FileExistsError, match="resume"):
        stream(rule, source(), sink)
    with pytest.raises(Stop):
        stream(rule, source(), sink, chunk=800, resume=True, progress=stop_after(4500))
    stream(rule, source(), sink, chunk=800, resume=True)
    got = np.load(sink) if name.endswith("npy") else np.fromfile(sink, np.uint8).reshape(whole.shape)
    np.testing.assert_array_equal(got, whole)
    assert not list(tmp_path.glob("*.progress*"))


@pytest.mark.parametrize("rule", [RULE, SLOW], ids=["plain", "hysteresis"])
def test_an_interrupted_count_goes_on(tmp_path, rule):
    whole = tally_stream(rule, X, TRUTH)
    with pytest.raises(Stop):
        tally_stream(rule, X, TRUTH, chunk=700, checkpoint=tmp_path / "t", progress=stop_after(3000))
    assert tally_stream(rule, X, TRUTH, chunk=900, checkpoint=tmp_path / "t", resume=True) == whole
    assert not list(tmp_path.iterdir())


def test_hysteresis_runs_on_from_chunk_to_chunk():
    np.testing.assert_array_equal(stream(SLOW, X, chunk=13), hysteresis_any(X, SLOW.levels, SLOW.decisions, 0.8)[0])
    two = X[:10_000].reshape(-1, 2)
    np.testing.assert_array_equal(stream(SLOW, two, chunk=26),
                                  hysteresis_any(two.T, SLOW.levels, SLOW.decisions, 0.8)[0].T)


def test_a_record_of_something_else_is_refused(tmp_path):
    sink = tmp_path / "c.raw"
    with pytest.raises(Stop):
        stream(RULE, X, sink, chunk=1000, progress=stop_after(3000))
    other = lm.rule([0.4, 1.8], [1, 0, 2], ["a", "b", "c"])
    with pytest.raises(ValueError, match="another rule"):
        stream(other, X, sink, resume=True)
    with pytest.raises(ValueError, match="another shape"):
        stream(RULE, X[:-1], sink, resume=True)
    (tmp_path / "c.raw.progress").write_text("{}")
    with pytest.raises(ValueError, match="no record"):
        stream(RULE, X, sink, resume=True)
    with pytest.raises(ValueError, match="keeps a record"):
        stream(RULE, X, resume=True)


def test_short_and_unreadable_files(tmp_path):
    path = tmp_path / "x.npy"
    np.save(path, X)
    path.write_bytes(path.read_bytes()[:-5])
    with pytest.raises(ValueError, match="shorter"):
        stream(RULE, path)
    path.write_bytes(b"nothing")
    with pytest.raises(ValueError, match="cannot be read"):
        stream(RULE, path)
    raw = tmp_path / "x.raw"
    raw.write_bytes(b"12345")
    with pytest.raises(ValueError, match="multiple of 4"):
        stream(RULE, raw, dtype="f4")
    with pytest.raises(ValueError, match="dtype"):
        stream(RULE, raw)
    with pytest.raises(ValueError, match="offset"):
        stream(RULE, raw, dtype="u1", offset=6)
    with pytest.raises(FileNotFoundError):
        stream(RULE, tmp_path / "none.npy")
    assert stream(RULE, raw, dtype="u1", offset=5).size == 0


@pytest.mark.parametrize("call, error, words", [
    (lambda: stream(RULE, X, np.zeros(3, np.uint8)), ValueError, "sink has shape"),
    (lambda: stream(RULE, X, np.zeros(X.shape)), TypeError, "sink holds"),
    (lambda: stream(RULE, X, 3), TypeError, "sink is"),
    (lambda: stream(RULE, 3.0), TypeError, "source is"),
    (lambda: stream(RULE, np.array(3.0)), ValueError, "single number"),
    (lambda: stream(RULE, X, chunk=0), ValueError, "chunk"),
    (lambda: stream(RULE, X, dtype="f4"), ValueError, "dtype"),
    (lambda: tally_stream(RULE, X, TRUTH[1:]), ValueError, "truth has shape"),
    (lambda: stream(RULE, [X, X], np.zeros(5, np.uint8)), ValueError, "room"),
])
def test_bad_input_is_named(call, error, words):
    with pytest.raises(error, match=words):
        call()


def test_progress_reaches_the_end():
    seen = []
    stream(RULE, X, chunk=3000, progress=lambda done, total: seen.append((done, total)))
    assert seen == [(3000, X.size), (6000, X.size), (9000, X.size), (X.size, X.size)]


@pytest.mark.skipif(sys.platform != "linux", reason="reads /proc")
def test_resident_memory_stays_bounded(tmp_path):
    """A sparse recording of 300 MB from a memmap to a memmap, in a process of its own: less than 60 MB more than before
    (the largest chunk, and what the interpreter takes on the way)."""
    with open(tmp_path / "x", "wb") as file:
        file.truncate(300 << 20)
    code = """
import sys, numpy as np
import limen as lm
from limen import stream
rule = lm.rule([0.5], [0, 1], ["a", "b"])
def status(field):
    return next(int(l.split()[1]) for l in open("/proc/self/status") if l.startswith(field)) >> 10
stream(rule, np.zeros(100, "f4"))
before = status("VmRSS")
x = np.memmap(sys.argv[1] + "/x", "f4", "r")
codes = stream(rule, x, np.memmap(sys.argv[1] + "/codes", "u1", "w+", shape=x.shape))
print(status("VmHWM") - before)
"""
    done = subprocess.run([sys.executable, "-c", code, str(tmp_path)], capture_output=True, text=True,
                          env={**os.environ, "LIMEN_THREADS": "1"})
    assert done.returncode == 0, done.stderr
    assert int(done.stdout) < 60
