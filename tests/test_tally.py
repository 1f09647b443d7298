"""Tallies: counts against the oracle, and the arithmetic of the object."""

import pickle
import tracemalloc

import awkward
import numpy as np
import oracle
import pytest

import limen as lm
from limen._arrays import tally_any

LEVELS = [0.385, 1.7, 6.04]
CODES = [1, 0, 2, 1]


@pytest.mark.parametrize("layout, dtype", awkward.all_readings())
def test_counts_are_the_oracle_s(layout, dtype):
    x = awkward.LAYOUTS[layout](awkward.values(dtype))
    truth = np.random.default_rng(1).integers(0, 4, x.shape).astype(np.uint8)
    codes = oracle.decide(x, LEVELS, CODES)
    wanted, lost = oracle.tally(codes, truth, 3, 4)
    store = np.zeros(x.shape, np.uint8)
    for given in (truth, truth.astype("i8"), truth.astype(">i4"), truth.tolist() if truth.size else truth):
        counts, invalid = tally_any(x, LEVELS, CODES, given, 3, 4, store)
        np.testing.assert_array_equal(counts, wanted)
        assert invalid == lost
        np.testing.assert_array_equal(store, codes)
    counts, invalid = tally_any(x, LEVELS, CODES, None, 3)
    np.testing.assert_array_equal(counts, wanted.sum(1))
    assert counts.dtype == np.int64 and invalid == lost


@pytest.mark.parametrize("decisions, states", [(1, 1), (2, 2), (4, 4), (5, 3), (16, 16), (200, 7), (255, 255)])
def test_any_number_of_decisions_and_states(decisions, states):
    rng = np.random.default_rng(decisions)
    x = rng.normal(size=70_001).astype(np.float32)
    x[::91] = np.nan
    levels = np.sort(rng.normal(size=decisions - 1))
    truth = rng.integers(0, states, x.size).astype(np.uint8)
    codes = rng.permutation(decisions).astype(np.uint8)
    wanted, lost = oracle.tally(lm.decide(x, levels, codes), truth, decisions, states)
    for threads in (1, 2):
        counts, invalid = tally_any(x, levels, codes, truth, decisions, states, threads=threads)
        np.testing.assert_array_equal(counts, wanted)
        assert invalid == lost


def test_threads_count_everything_once():
    x = np.random.default_rng(0).normal(size=3_000_000).astype(np.float32)
    truth = (x > 0.1).astype(bool)
    counts, invalid = tally_any(x, [0.0], [0, 1], truth, threads=3)
    assert counts.sum() == x.size and invalid == 0
    np.testing.assert_array_equal(counts, [[(x < 0).sum(), 0], [((x >= 0) & ~truth).sum(), truth.sum()]])


def test_sizes_follow_from_the_data_when_not_given():
    counts, _ = tally_any([1.0, 5.0], [2.0], [0, 3], [0, 2])
    assert counts.shape == (4, 3)


def test_missing_readings_are_invalid():
    masked = np.ma.array([1.0, 5.0, 7.0], mask=[0, 1, 0])
    counts, invalid = tally_any(masked, [2.0], [0, 1], [0, 0, 1], 2, 2)
    assert counts.tolist() == [[1, 0], [0, 1]] and invalid == 1


def test_no_temporary_beside_the_counts():
    x = np.random.default_rng(1).normal(size=1_000_000).astype(np.float32)
    truth = np.zeros(x.size, np.uint8)
    tally_any(x[:10], LEVELS, CODES, truth[:10], 3, 4)
    tracemalloc.start()
    tally_any(x, LEVELS, CODES, truth, 3, 4)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert peak < 20_000


@pytest.mark.parametrize("truth, error, words", [
    ([0, 1, 2], ValueError, "truth is 2"),
    ([0, -1, 1], ValueError, "truth is -1"),
    ([0, 1], ValueError, "shape"),
    ([0.0, 1.0, 1.0], TypeError, "truth holds float64"),
    (["a", "b", "a"], TypeError, "truth"),
    (np.array([0, 1, 256]), ValueError, "truth is 256"),
    (np.array([0, 1, 2**63], np.uint64), ValueError, "truth is 9.22"),
])
def test_bad_truth_is_named(truth, error, words):
    with pytest.raises(error, match=words):
        tally_any([1.0, 2.0, 3.0], [2.0], [0, 1], truth, 2, 2)


def test_codes_beyond_the_decisions_are_refused():
    with pytest.raises(ValueError, match="decisions holds 3"):
        tally_any([1.0], [2.0], [0, 3], None, 2)


def test_a_tally_adds_and_says_its_error_rate():
    t = lm.Tally([[98, 1], [2, 99]], 3, ["empty", "cap"])
    both = sum([t, t])
    assert both.counts.tolist() == [[196, 2], [4, 198]] and both.invalid == 6
    assert (both.total, both.correct, both.errors, both.undecided, both.error_rate) == (400, 394, 6, 0, 0.015)
    np.testing.assert_allclose(t.transition, [[0.98, 0.01], [0.02, 0.99]], rtol=1e-15)  # one rounding each
    assert "empty" in str(t) and "3 wrong" in repr(t) and "3 more were NaN" in repr(t)
    assert lm.Tally(**t.to_dict()) == t and pickle.loads(pickle.dumps(t)) == t and t != both
    with pytest.raises(ValueError, match="do not add"):
        t + lm.Tally([[98, 1], [2, 99]], 3, ["a", "b"])
    with pytest.raises(TypeError):
        t + 1


def test_an_extra_decision_is_neither_right_nor_wrong():
    t = lm.Tally([[8, 1], [2, 9], [5, 5]], 0, ["a", "b", "undecided"])
    assert (t.correct, t.errors, t.undecided) == (17, 3, 10) and t.states == ("a", "b")
    assert lm.Tally([[8, 1], [2, 9]], 0, ["b", "a"], ["a", "b"]).errors == 17  # told by name, not by place


def test_a_tally_without_truth():
    t = lm.Tally([5, 6], names=["a", "b"])
    assert t.total == 11 and lm.Tally(**t.to_dict()) == t
    for name in ("errors", "error_rate", "transition"):
        with pytest.raises(ValueError, match="true states"):
            getattr(t, name)


def test_names_are_escaped_in_html():
    assert "<b>" not in lm.Tally([5, 6], names=["<b>", "&"])._repr_html_()


@pytest.mark.parametrize("arguments, words", [
    (([[1, -2]],), "counts"), (([[0.5]],), "counts"), ((3,), "counts"), (([1, 2], -1), "invalid"),
    (([1, 2], 0, ["a"]), "names"), (([[1, 2]], 0, ["a"], ["b"]), "states"),
])
def test_bad_tallies_are_refused(arguments, words):
    with pytest.raises(ValueError, match=words):
        lm.Tally(*arguments)
