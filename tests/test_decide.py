"""lm.decide against the definition in exact arithmetic, for every type, layout and kind of array."""

import os
import signal
import subprocess
import sys
import tracemalloc

import awkward
import numpy as np
import oracle
import pytest

import limen as lm
from limen import _core
from limen._arrays import decide_any, pack_any, tally_any

LEVELS = [0.385, 1.7, 6.04]
CODES = [3, 0, 2, 1]
MANY = np.linspace(-40.25, 90.5, 200)


@pytest.mark.parametrize("layout, dtype", awkward.all_readings())
def test_every_layout_decides_as_the_oracle(layout, dtype):
    x = awkward.LAYOUTS[layout](awkward.values(dtype))
    before = x.tobytes()
    wanted = oracle.decide(x, LEVELS, CODES)
    got = lm.decide(x, LEVELS, CODES)
    assert got.dtype == np.uint8 and np.shape(got) == x.shape
    np.testing.assert_array_equal(got, wanted)
    np.testing.assert_array_equal(_core.decide(x, np.array(LEVELS), np.array(CODES, np.uint8)), wanted)
    assert x.tobytes() == before


@pytest.mark.parametrize("layout, dtype", awkward.all_readings())
def test_out_is_filled_and_returned(layout, dtype):
    x = awkward.LAYOUTS[layout](awkward.values(dtype))
    for out in (np.zeros(x.shape, np.uint8), np.zeros((*x.shape, 2), np.uint8)[..., 0]):
        assert lm.decide(x, LEVELS, CODES, out=out) is out
        np.testing.assert_array_equal(out, oracle.decide(x, LEVELS, CODES))


@pytest.mark.parametrize("count", [0, 1, 2, 15, 16, 31, 32, 127, 128, 254])
@pytest.mark.parametrize("dtype", awkward.TYPES)
def test_any_number_of_levels(dtype, count):
    x = awkward.values(dtype)
    levels = np.sort(np.random.default_rng(count).normal(20, 40, count))
    wanted = oracle.decide(x, levels, range(count + 1))
    np.testing.assert_array_equal(lm.decide(x, levels, np.arange(count + 1)), wanted)


def test_255_levels_are_refused():
    with pytest.raises(ValueError, match="254"):
        lm.decide([1.0], np.arange(255.0), np.zeros(256, np.uint8))


@pytest.mark.parametrize("dtype", awkward.FLOATS)
def test_the_neighbours_of_every_level(dtype):
    """Levels that fall on, just above and just below a value of the type, and readings one step around."""
    rng = np.random.default_rng(11)
    kind = np.dtype(dtype).type
    odd = [0.0, 6e-8, -6e-8, 1e-45, 65504.0, 65520.0, 3.4028234e38, 1e39]
    at = np.sort(np.concatenate([rng.normal(0, 10, 20), odd]))
    with np.errstate(over="ignore"):
        near = at.astype(kind)
        x = np.concatenate([near, np.nextafter(near, kind(np.inf)), np.nextafter(near, kind(-np.inf))])
    for level in np.concatenate([at, np.nextafter(at, np.inf), np.nextafter(at, -np.inf), near.astype(float)]):
        np.testing.assert_array_equal(lm.decide(x, [level], [0, 1]), x.astype(np.float64) >= level)


@pytest.mark.parametrize("level", [-np.inf, -32769.0, -32768.0, -0.5, -0.0, 1e-300, 1234.0000000001, 32767.0, 32767.5,
                                   np.inf])
def test_all_int16_codes(level):
    x = np.arange(-32768, 32768, dtype=np.int16)
    np.testing.assert_array_equal(lm.decide(x, [level], [0, 1]), x.astype(np.float64) >= level)


@pytest.mark.parametrize("dtype", ["int64", "uint64"])
@pytest.mark.parametrize("level", [2.0**53, 2.0**53 + 2, 2.0**63, 2.0**63 + 2048, 2.0**64, -2.0**63])
def test_wide_integers_are_never_rounded(dtype, level):
    """float64 cannot tell 2**53 from 2**53 + 1; the levels are turned into integers instead (NumPy's #11022)."""
    info = np.iinfo(dtype)
    x = np.array([v for base in (0, 2**53, 2**63, info.max, info.min) for v in range(base - 3, base + 4)
                  if info.min <= v <= info.max], dtype)
    np.testing.assert_array_equal(lm.decide(x, [level], [0, 1]), [int(v) >= int(level) for v in x])


def test_every_nan_is_invalid_whatever_its_bits():
    rng = np.random.default_rng(3)
    for bits, mask in ((np.uint16, 0x7C01), (np.uint32, 0x7F800001), (np.uint64, 0x7FF0000000000001)):
        raw = rng.integers(0, np.iinfo(bits).max, 200, dtype=bits, endpoint=True) | bits(mask)
        x = raw.view({2: "f2", 4: "f4", 8: "f8"}[raw.itemsize])
        assert (lm.decide(x, LEVELS, CODES) == 255).all()


@pytest.mark.parametrize("dtype", awkward.FLOATS)
def test_nan_raises_no_warning_and_leaves_no_flag(dtype):
    x = awkward.values(dtype, 5000)
    x[::7] = np.nan
    with np.errstate(all="raise"):
        lm.decide(x, LEVELS, CODES)
        _core.decide(x, np.array(LEVELS), np.array(CODES, np.uint8))
        np.add(x[1:2], x[1:2])


def test_scalars_and_lists():
    one = lm.decide(1.7, LEVELS, CODES)
    assert isinstance(one, np.uint8) and one == 2
    assert lm.decide(np.nextafter(0.385, 0), LEVELS, CODES) == 3  # as float32 it would be above
    assert lm.decide(7, LEVELS, CODES) == 1
    assert lm.decide(True, [1.0], [0, 1]) == 1
    assert lm.decide(np.float32(1.7), LEVELS, CODES) == (2 if float(np.float32(1.7)) >= 1.7 else 0)
    assert lm.decide([], LEVELS, CODES).shape == (0,)
    assert lm.decide([[1, 2], [3, 9]], LEVELS, CODES).tolist() == [[0, 2], [2, 1]]


@pytest.mark.parametrize("shape, levels_shape", [
    ((40, 4), (4, 2)), ((4, 40), (4, 1, 2)), ((3, 1, 7), (5, 1, 2)), ((), (6, 2))])
def test_each_channel_has_its_own_levels(shape, levels_shape):
    rng = np.random.default_rng(8)
    x = rng.normal(size=shape).astype(np.float32)
    levels = np.sort(rng.normal(size=levels_shape), axis=-1)
    wanted_shape = np.broadcast_shapes(shape, levels_shape[:-1])
    got = lm.decide(x, levels, [0, 1, 2])
    assert got.shape == wanted_shape
    wanted = (np.asarray(x, np.float64)[..., None] >= levels).sum(-1)
    np.testing.assert_array_equal(got, wanted)
    out = np.empty(wanted_shape, np.uint8)
    assert lm.decide(x, levels, [0, 1, 2], out=out) is out
    np.testing.assert_array_equal(out, wanted)
    np.testing.assert_array_equal(decide_any(np.where(x > 1, np.nan, x), levels, [0, 1, 2], invalid=9),
                                  np.where(np.broadcast_to(x > 1, wanted_shape), 9, wanted))


@pytest.mark.parametrize("channels, count", [(1, 2), (3, 1), (7, 3), (64, 3), (255, 2), (256, 15), (1000, 4)])
@pytest.mark.parametrize("dtype", awkward.TYPES)
def test_interleaved_channels_of_every_type(dtype, channels, count):
    """Each channel alone, by its own levels, some beyond what an integer type can reach; codes shared and not."""
    rng = np.random.default_rng(channels)
    x = awkward.values(dtype, 23 * channels + 150)[:23 * channels].reshape(23, channels)
    levels = np.sort(rng.normal(30, 60, (channels, count)), axis=-1)
    levels[::5, -1] = 1e30
    levels[::7, 0] = -1e30
    for codes in (np.arange(count + 1), rng.integers(0, 255, count + 1), rng.integers(0, 255, (channels, count + 1))):
        each = np.broadcast_to(codes, (channels, count + 1))
        wanted = np.stack([lm.decide(x[:, c], levels[c], each[c]) for c in range(channels)], 1)
        for given in (x, np.asfortranarray(x), x.astype(x.dtype.newbyteorder()),
                      awkward.unaligned(x.ravel()).reshape(x.shape)):
            np.testing.assert_array_equal(lm.decide(given, levels, codes), wanted)
        out = np.zeros((23, channels, 2), np.uint8)[..., 0]
        assert decide_any(x, levels, codes, out=out, threads=2) is out
        np.testing.assert_array_equal(out, wanted)


def test_threads_change_nothing():
    x = np.random.default_rng(2).normal(size=3_000_001).astype(np.float32)
    wanted = decide_any(x, LEVELS, CODES, threads=1)
    for threads in (None, 2, 3, 300):
        np.testing.assert_array_equal(decide_any(x, LEVELS, CODES, threads=threads), wanted)
    np.testing.assert_array_equal(decide_any(x[::-2], LEVELS, CODES, threads=2), wanted[::-2])


def test_out_may_be_the_readings():
    x = np.arange(256, dtype=np.uint8)
    wanted = oracle.decide(x, [7.5, 100], [1, 2, 0])
    for target in (x.copy(), np.repeat(x, 2)[::2]):
        np.testing.assert_array_equal(lm.decide(target, [7.5, 100], [1, 2, 0], out=target), wanted)
    store = np.arange(300, dtype=np.uint8)
    np.testing.assert_array_equal(lm.decide(store[:256], [7.5, 100], [1, 2, 0], out=store[3:259]), wanted)


@pytest.mark.parametrize("call, error, words", [
    (lambda: lm.decide([1.0], [2.0, 1.0], [0, 1, 2]), ValueError, "levels"),
    (lambda: lm.decide([1.0], [np.nan], [0, 1]), ValueError, "levels"),
    (lambda: lm.decide([1.0], [1.0], [0]), ValueError, "decisions"),
    (lambda: lm.decide([1.0], [1.0, 2.0], [0, 1]), ValueError, "decisions"),
    (lambda: lm.decide([[1.0]], [[2.0, 1.0]], [0, 1, 2]), ValueError, "levels"),
    (lambda: lm.decide([1.0], [1.0], [0, 256]), ValueError, "256"),
    (lambda: lm.decide([1.0], [1.0], [0, 255]), ValueError, "255"),
    (lambda: lm.decide([1.0], [1.0], [-1, 0]), ValueError, "-1"),
    (lambda: lm.decide([1.0], [1.0], [0.5, 1]), TypeError, "decisions"),
    (lambda: lm.decide([1.0], 1.0, [0, 1]), ValueError, "levels"),
    (lambda: lm.decide([1j], [1.0], [0, 1]), TypeError, "complex"),
    (lambda: lm.decide(np.longdouble([1]), [1.0], [0, 1]), TypeError, "64"),
    (lambda: lm.decide(["a"], [1.0], [0, 1]), TypeError, "real numbers"),
    (lambda: lm.decide([1.0, None], [1.0], [0, 1]), TypeError, "real numbers"),
    (lambda: lm.decide([1.0], [1.0], [0, 1], out=np.zeros(1)), TypeError, "uint8"),
    (lambda: lm.decide([1.0], [1.0], [0, 1], out=np.zeros(2, "u1")), ValueError, "shape"),
    (lambda: lm.decide([1.0], [1.0], [0, 1], out=[0]), TypeError, "out"),
    (lambda: lm.decide([1.0], [1.0], [0, 1], out=np.frombuffer(b"\0", "u1")), ValueError, "read-only"),
    (lambda: decide_any([1.0], [1.0], [0, 1], threads=0), ValueError, "threads"),
])
def test_bad_input_is_named(call, error, words):
    with pytest.raises(error, match=words):
        call()


def test_no_temporary_is_larger_than_the_output():
    """Strided, byte-swapped and unaligned readings too: nothing is copied whole (NumPy's #26886, #16942)."""
    x = np.random.default_rng(1).normal(size=(1000, 1001)).astype(np.float32)
    for view in (x, x[:, 1:], x.T, x[:, ::2], x.astype(">f4"), awkward.unaligned(x.ravel())):
        tracemalloc.start()
        codes = lm.decide(view, LEVELS, CODES)
        peak = tracemalloc.get_traced_memory()[1]
        tracemalloc.stop()
        assert peak <= codes.nbytes + 20_000  # the fixed size of Python objects of the call


def run_with(cpu, code):
    return subprocess.run([sys.executable, "-c", code], capture_output=True, text=True,
                          env={**os.environ, "LIMEN_CPU": cpu})


def test_every_set_of_kernels_decides_the_same_bits():
    """Each usable set in a process of its own, on random bits of every type, compared by digest."""
    code = """
import hashlib, numpy as np, limen as lm
rng, digest = np.random.default_rng(4), hashlib.sha256()
for dtype in "bBhHiIlLefd":
    for count in (0, 1, 3, 15, 16, 40, 90, 254):
        x = np.frombuffer(rng.bytes(8 * 777), dtype)
        with np.errstate(all="ignore"):
            pool = rng.choice(x, 254).astype(float)
            pool = pool[~np.isnan(pool)]
        levels = np.sort(rng.choice(pool, count)) if count else np.zeros(0)
        codes = rng.integers(0, 255, count + 1)
        digest.update(lm.decide(x, levels, codes).tobytes())
        digest.update(lm.decide(x[::-3], levels, np.arange(count + 1)).tobytes())
        own = np.sort(rng.normal(0, 40, (5, min(count, 20))))
        digest.update(lm.decide(x[:x.size // 5 * 5].reshape(-1, 5), own, np.arange(own.shape[1] + 1)).tobytes())
print(lm.build_info()["kernels"], digest.hexdigest())
"""
    digests = set()
    for name in lm.build_info()["usable_kernels"]:
        done = run_with(name, code)
        assert done.returncode == 0, done.stderr
        ran, digest = done.stdout.split()
        assert ran == name
        digests.add(digest)
    assert len(digests) == 1


def test_unknown_kernels_stop_the_import():
    done = run_with("abacus", "import limen")
    assert done.returncode != 0 and "ImportError" in done.stderr and "portable" in done.stderr


def test_threads_of_the_environment(monkeypatch):
    monkeypatch.setenv("LIMEN_THREADS", "many")
    with pytest.raises(ValueError, match="LIMEN_THREADS"):
        lm._arrays.thread_count(None, 1 << 30)
    monkeypatch.setenv("LIMEN_THREADS", "3")
    assert lm._arrays.thread_count(None, 1 << 30) == 3
    assert lm._arrays.thread_count(None, 10) == 1


def test_the_ufunc_pickles():
    import pickle

    assert pickle.loads(pickle.dumps(_core.decide)) is _core.decide


def test_a_float32_reading_decides_as_its_own_value():
    """float32(0.2) lies above 0.2 and float32(0.3) above 0.3, float32(0.7) below 0.7: the type of the levels must not
    change that (NumPy's #23218)."""
    for level in (0.2, 0.3, 0.7, 0.1, 1 / 3):
        x = np.float32([level])
        assert lm.decide(x, [level], [0, 1])[0] == (float(x[0]) >= level)
        assert lm.decide(x, np.float32([level]), [0, 1])[0] == 1  # these levels are the rounded ones


@pytest.mark.parametrize("dtype", ["int8", "int16", "float16", "float32"])
def test_python_numbers_as_levels_cast_no_reading(dtype):
    """NumPy's #29719, #13579, #5370: a Python int beside a narrow array cost a cast of the whole array."""
    x = np.ones(1_000_000, dtype)
    out = np.empty(x.shape, np.uint8)
    lm.decide(x, [1, 2], [0, 1, 2], out=out)
    tracemalloc.start()
    lm.decide(x, [1, 2], [0, 1, 2], out=out)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert peak < 20_000


def test_an_interrupt_stops_a_long_call():
    """A tally of 2**40 readings that are one number in memory would take minutes; the handler of a signal ends it."""
    class Stop(Exception):
        pass

    def stop(number, frame):
        raise Stop

    before = signal.signal(signal.SIGALRM, stop)
    try:
        for threads in (1, 2):
            signal.setitimer(signal.ITIMER_REAL, 0.05)
            with pytest.raises(Stop):
                tally_any(np.broadcast_to(np.float32(1), 2**40), LEVELS, CODES, threads=threads)
    finally:
        signal.setitimer(signal.ITIMER_REAL, 0)
        signal.signal(signal.SIGALRM, before)


def test_a_fork_after_threads_can_use_threads():
    code = """
import os, numpy as np
from limen._arrays import decide_any, pack_any, tally_any
x = np.zeros(2_000_000, np.float32)
decide_any(x, [0.5], [0, 1], threads=2)
child = os.fork()
if child == 0:
    os._exit(int(decide_any(x, [0.5], [0, 1], threads=2).any()))
assert os.waitpid(child, 0)[1] == 0
"""
    subprocess.run([sys.executable, "-W", "ignore", "-c", code], check=True, timeout=60)


@pytest.mark.slow
def test_more_readings_than_32_bits_count():
    n = 2**31 + 12_345
    x = np.broadcast_to(np.uint8(7), n)
    counts, invalid = tally_any(x, [5.0], [0, 1])
    assert counts.tolist() == [0, n] and invalid == 0
    assert pack_any(np.broadcast_to(np.uint8(7), 2**31 + 16), [5.0], [0, 1])[-2:].tolist() == [255, 255]
