"""Hysteresis against the walk of one reading after the other, whole and in chunks."""

import awkward
import numpy as np
import oracle
import pytest

import limen as lm
from limen._arrays import decide_any, hysteresis_any

LEVELS = [0.385, 1.7, 6.04]
CODES = [3, 0, 2, 1]


@pytest.mark.parametrize("width", [0.0, 0.25, 3.0])
@pytest.mark.parametrize("layout", ["contiguous", "strided", "reversed", "swapped", "unaligned", "empty", "one"])
@pytest.mark.parametrize("dtype", awkward.TYPES)
def test_equals_the_walk(dtype, layout, width):
    x = awkward.LAYOUTS[layout](awkward.values(dtype))
    for start in (None, 0, 3):
        wanted, end = oracle.hysteresis(x.astype(np.longdouble), LEVELS, CODES, width, start)
        got, got_end = hysteresis_any(x, LEVELS, CODES, width, start)
        np.testing.assert_array_equal(got, wanted)
        assert got_end == (255 if end is None else end)


def test_chunks_continue_where_the_last_one_ended():
    x = np.cumsum(np.random.default_rng(3).normal(size=10_000)).astype(np.float32) / 20
    x[:5] = np.nan
    whole, end = hysteresis_any(x, LEVELS, CODES, 0.8)
    state, parts = None, []
    for part in np.array_split(x, 13):
        codes, state = hysteresis_any(part, LEVELS, CODES, 0.8, state)
        parts.append(codes)
    np.testing.assert_array_equal(np.concatenate(parts), whole)
    assert state == end
    np.testing.assert_array_equal(hysteresis_any(x, LEVELS, CODES, 0)[0], decide_any(x, LEVELS, CODES))


def test_runs_along_the_last_axis_are_apart():
    x = np.random.default_rng(4).normal(1, 2, size=(3, 2, 40))
    codes, ends = hysteresis_any(x, LEVELS, CODES, 0.5)
    assert ends.shape == (3, 2)
    for i in np.ndindex(3, 2):
        wanted, end = oracle.hysteresis(x[i], LEVELS, CODES, 0.5)
        np.testing.assert_array_equal(codes[i], wanted)
        assert ends[i] == end
    again, _ = hysteresis_any(x.transpose(1, 0, 2), LEVELS, CODES, 0.5)
    np.testing.assert_array_equal(again, codes.transpose(1, 0, 2))


def test_a_band_for_each_level():
    codes, _ = hysteresis_any([0, 1.2, 0.9, 0.7, 2.4, 2.6, 1.6, 1.39], [1.0, 2.0], [0, 1, 2], [0.4, 1.2])
    assert codes.tolist() == [0, 1, 1, 0, 1, 2, 2, 1]


def test_scalars_out_and_missing():
    code, end = hysteresis_any(0.9, [1.0], [0, 1], 0.5, start=1)
    assert code == 1 and end == 1
    out = np.zeros(3, np.uint8)
    codes, _ = hysteresis_any([0.0, 2.0, 0.9], [1.0], [0, 1], 0.5, out=out)
    assert codes is out and out.tolist() == [0, 1, 1]
    codes, end = hysteresis_any(np.ma.array([0, 2, 9, 1], mask=[0, 0, 1, 0]), [1.0], [0, 1], 0.5)
    assert codes.tolist() == [0, 1, None, 1] and codes.data[2] == 255 and end == 1


@pytest.mark.parametrize("width, start, words", [
    (-1.0, None, "width"), (np.nan, None, "width"), (np.inf, None, "width"), ([0.1, 0.1, 9.0], None, "width"),
    (0.1, 4, "start"), (0.1, -1, "start"), (0.1, 0.5, "start"), (0.1, 300, "start"),
])
def test_bad_input_is_named(width, start, words):
    with pytest.raises(ValueError, match=words):
        hysteresis_any([1.0, 2.0], LEVELS, CODES, width, start)


def test_rules_count_what_hysteresis_decides():
    x = np.random.default_rng(5).normal(1, 2, 3000)
    x[::50] = np.nan
    truth = (x > 0.5).astype(int)
    r = lm.rule(LEVELS, [1, 0, 1, 0], ["a", "b"]).with_hysteresis(0.5)
    codes = r.decide(x)
    for t in (r.tally(x, truth), lm.tally_stream(r, x, truth, chunk=700)):
        for d in range(2):
            for s in range(2):
                assert t.counts[d, s] == ((codes == d) & (truth == s)).sum()
        assert t.invalid == 60
    np.testing.assert_array_equal(lm.stream(r, x, chunk=77), codes)
    with pytest.raises(ValueError, match="hysteresis"):
        r.pack(x)
