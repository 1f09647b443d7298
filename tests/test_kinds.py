"""Kinds of arrays: what goes in comes back as its own kind, and what cannot be served is refused with the way out."""

import array
import threading

import numpy as np
import oracle
import pytest

import limen as lm
from limen._arrays import decide_any, hysteresis_any, pack_any, tally_any

LEVELS = [0.385, 1.7, 6.04]
CODES = [1, 0, 2, 1]
X = np.array([0.385, 1.7, -2.31, np.nan, 6.04, np.inf])
WANTED = oracle.decide(X, LEVELS, CODES)


def test_masked_readings_stay_masked_and_get_the_invalid_code():
    x = np.ma.array(X, mask=[1, 0, 0, 0, 0, 0])
    got = lm.decide(x, LEVELS, CODES)
    assert isinstance(got, np.ma.MaskedArray)
    assert got.mask.tolist() == x.mask.tolist()
    assert got.data.tolist() == [255, *WANTED[1:].tolist()]


def test_subclasses_and_buffers(tmp_path):
    path = tmp_path / "x.bin"
    X.tofile(path)
    for x in (np.memmap(path, np.float64, "r"), X.view(np.recarray), array.array("d", X), memoryview(X)):
        got = lm.decide(x, LEVELS, CODES)
        assert type(got) is np.ndarray
        np.testing.assert_array_equal(got, WANTED)


def test_anything_with_an_array_protocol():
    class Interface:
        __array_interface__ = X.__array_interface__

    class Array:
        def __array__(self, dtype=None, copy=None):
            return X

    class DLPack:
        def __dlpack__(self, **options):
            return X.__dlpack__(**options)

        def __dlpack_device__(self):
            return X.__dlpack_device__()

    for x in (Interface(), Array(), DLPack()):
        np.testing.assert_array_equal(lm.decide(x, LEVELS, CODES), WANTED)


@pytest.mark.parametrize("module, attributes, words", [
    ("astropy.units.quantity", {"to_value": None}, "to_value"),
    ("pint", {"units": None}, "magnitude"),
    ("cupy", {}, r"\.get\(\)"),
    ("torch", {"device": type("Device", (), {"type": "cuda"})()}, r"\.cpu\(\)"),
])
def test_units_and_devices_are_refused_with_the_way_out(module, attributes, words):
    """Stand-ins with the module names of those libraries: none of them is needed to refuse them."""
    x = type("Foreign", (), {"__module__": module, **attributes})()
    with pytest.raises(TypeError, match=words):
        lm.decide(x, LEVELS, CODES)


def test_other_threads_get_one_thread_by_default():
    from limen._arrays import thread_count

    seen = []
    worker = threading.Thread(target=lambda: seen.append(thread_count(None, 1 << 30)))
    worker.start()
    worker.join()
    assert seen == [1]


def test_readings_may_be_decided_from_many_threads_at_once():
    x = np.random.default_rng(0).normal(size=400_000)
    wanted = lm.decide(x, LEVELS, CODES)
    results = [None] * 4
    threads = [threading.Thread(target=lambda i=i: results.__setitem__(i, decide_any(x, LEVELS, CODES, threads=2)))
               for i in range(4)]
    for t in threads:
        t.start()
    for t in threads:
        t.join()
    for got in results:
        np.testing.assert_array_equal(got, wanted)


# ---- pandas ----

def test_pandas_series_frame_and_index():
    pd = pytest.importorskip("pandas")
    series = pd.Series(X, index=list("abcdef"), name="volts")
    got = lm.decide(series, LEVELS, CODES)
    pd.testing.assert_series_equal(got, pd.Series(WANTED, index=list("abcdef"), name="volts"))
    frame = pd.DataFrame({"a": X.astype(np.float32), "b": np.arange(6)}, index=series.index)
    got = lm.decide(frame, LEVELS, CODES)
    assert got.columns.tolist() == ["a", "b"] and got.index.tolist() == series.index.tolist()
    np.testing.assert_array_equal(got["b"], oracle.decide(np.arange(6), LEVELS, CODES))
    np.testing.assert_array_equal(got["a"], oracle.decide(X.astype(np.float32), LEVELS, CODES))
    assert isinstance(lm.decide(pd.Index([1.0, 2.0]), LEVELS, CODES), pd.Index)


def test_pandas_missing_values_are_invalid():
    pd = pytest.importorskip("pandas")
    for dtype in ("Int64", "Float32", "UInt8"):
        series = pd.Series([1, None, 7], dtype=dtype)
        assert lm.decide(series, LEVELS, CODES).tolist() == [0, 255, 1]
        counts, invalid = tally_any(series, LEVELS, CODES, [0, 1, 1], 3, 2)
        assert counts.tolist() == [[1, 0], [0, 1], [0, 0]] and invalid == 1
    wide = pd.Series([2**53 + 1, None], dtype="Int64")  # float64 would round it down to the level
    assert lm.decide(wide, [2.0**53 + 2], [0, 1]).tolist() == [0, 255]
    with pytest.raises(TypeError, match="real numbers"):
        lm.decide(pd.Series(["a"]), LEVELS, CODES)
    codes, end = hysteresis_any(pd.Series([0, None, 2, 1], dtype="Int64"), [1.5], [0, 1], 1.0)
    assert codes.tolist() == [0, 255, 1, 1] and end == 1


def test_pandas_truth_must_be_in_the_same_order():
    pd = pytest.importorskip("pandas")
    x = pd.Series([1.0, 9.0], index=[0, 1])
    assert tally_any(x, [2.0], [0, 1], pd.Series([0, 1], index=[0, 1]))[0].tolist() == [[1, 0], [0, 1]]
    with pytest.raises(ValueError, match="index"):
        tally_any(x, [2.0], [0, 1], pd.Series([0, 1], index=[1, 0]))


# ---- dask ----

def test_dask_stays_lazy():
    da = pytest.importorskip("dask.array")
    rng = np.random.default_rng(5)
    x = rng.normal(1, 3, size=(60, 7)).astype(np.float32)
    lazy = da.from_array(x, chunks=(16, 3))
    got = lm.decide(lazy, LEVELS, CODES)
    assert isinstance(got, da.Array) and got.dtype == np.uint8 and got.chunks == lazy.chunks
    np.testing.assert_array_equal(got.compute(scheduler="threads"), lm.decide(x, LEVELS, CODES))
    with pytest.raises(TypeError, match="out"):
        lm.decide(lazy, LEVELS, CODES, out=np.zeros(x.shape, np.uint8))
    with pytest.raises(TypeError, match="order"):
        hysteresis_any(lazy, LEVELS, CODES, 0.5)


@pytest.mark.parametrize("levels_shape, codes_shape", [
    ((7, 2), (3,)), ((60, 1, 2), (3,)), ((1, 2), (1, 3)), ((7, 2), (7, 3))])
def test_dask_with_levels_for_each_channel(levels_shape, codes_shape):
    da = pytest.importorskip("dask.array")
    rng = np.random.default_rng(6)
    x = rng.normal(size=(60, 7))
    levels = np.sort(rng.normal(size=levels_shape), axis=-1)
    codes = np.broadcast_to([2, 0, 1], codes_shape)
    got = lm.decide(da.from_array(x, chunks=(16, 3)), levels, codes)
    assert isinstance(got, da.Array)
    np.testing.assert_array_equal(got.compute(scheduler="sync"), lm.decide(x, levels, codes))


def test_dask_tallies_and_bits():
    da = pytest.importorskip("dask.array")
    rng = np.random.default_rng(7)
    x = rng.normal(1, 3, size=(50, 40))
    x[::7, 3] = np.nan
    truth = rng.integers(0, 2, x.shape)
    lazy = da.from_array(x, chunks=(16, 24))
    wanted = tally_any(x, LEVELS, CODES, truth, 3, 2)
    for true in (truth, da.from_array(truth, chunks=(50, 10))):
        counts, invalid = tally_any(lazy, LEVELS, CODES, true, 3, 2)
        np.testing.assert_array_equal(counts, wanted[0])
        assert invalid == wanted[1]
    counts, _ = tally_any(lazy, LEVELS, CODES)
    np.testing.assert_array_equal(counts, wanted[0].sum(1))
    bits = pack_any(lazy, [0.5], [0, 1], invalid=0)
    np.testing.assert_array_equal(bits.compute(), pack_any(x, [0.5], [0, 1], invalid=0))
    with pytest.raises(ValueError, match="multiples of 8"):
        pack_any(lazy.rechunk((16, 20)), [0.5], [0, 1])
    with pytest.raises(ValueError, match="truth"):
        tally_any(lazy, LEVELS, CODES, truth[:3], 3, 2)


# ---- xarray ----

def test_xarray_keeps_dimensions_coordinates_and_laziness():
    xr = pytest.importorskip("xarray")
    da = pytest.importorskip("dask.array")
    values = np.random.default_rng(8).normal(1, 3, size=(20, 4)).astype(np.float32)
    x = xr.DataArray(values, dims=("time", "channel"), coords={"channel": list("abcd")}, name="volts")
    wanted = lm.decide(values, LEVELS, CODES)
    got = lm.decide(x, LEVELS, CODES)
    assert got.dims == x.dims and got.dtype == np.uint8 and got.channel.values.tolist() == list("abcd")
    np.testing.assert_array_equal(got, wanted)
    lazy = lm.decide(x.chunk({"time": 7}), LEVELS, CODES)
    assert isinstance(lazy.data, da.Array)
    np.testing.assert_array_equal(lazy.compute(), wanted)
    both = lm.decide(xr.Dataset({"u": x, "v": 2 * x}), LEVELS, CODES)
    np.testing.assert_array_equal(both.v, lm.decide(2 * values, LEVELS, CODES))
    own = np.sort(np.random.default_rng(9).normal(size=(4, 2)), axis=-1)
    np.testing.assert_array_equal(lm.decide(x, own, [0, 1, 2]), lm.decide(values, own, [0, 1, 2]))
    np.testing.assert_array_equal(lm.decide(x.chunk({"time": 7, "channel": 2}), own, [0, 1, 2]),
                                  lm.decide(values, own, [0, 1, 2]))


# ---- many machines ----

def test_two_worker_processes_count_as_one(tmp_path):
    """A memmapped recording on a cluster of two processes: codes and counts equal those of one call."""
    distributed = pytest.importorskip("distributed")
    da = pytest.importorskip("dask.array")
    rng = np.random.default_rng(10)
    x = rng.normal(1, 2, 200_000).astype(np.float32)
    x[::1001] = np.nan
    truth = rng.integers(0, 2, x.size).astype(np.uint8)
    x.tofile(tmp_path / "x")
    wanted = tally_any(x, LEVELS, CODES, truth, 3, 2)
    mapped = np.memmap(tmp_path / "x", np.float32, "r")
    with distributed.LocalCluster(n_workers=2, threads_per_worker=1, processes=True, dashboard_address=None,
                                  local_directory=str(tmp_path)) as cluster, distributed.Client(cluster):
        lazy = da.from_array(mapped, chunks=25_000)
        np.testing.assert_array_equal(lm.decide(lazy, LEVELS, CODES).compute(), lm.decide(x, LEVELS, CODES))
        rule = lm.rule(LEVELS, CODES, ["a", "b", "c"])
        t = rule.tally(lazy, truth, states=["a", "b"])
        states = lm.States({"a": lm.gaussian(0, 1), "b": lm.laplace(2, 1)})
        llr = states.soft("a", "b")
        np.testing.assert_array_equal(llr(lazy).compute(), llr(x))
    np.testing.assert_array_equal(t.counts, wanted[0])
    assert t.invalid == wanted[1]
