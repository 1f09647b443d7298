"""Packed bits: numpy.packbits of the oracle's codes, for every layout."""

import awkward
import numpy as np
import oracle
import pytest

from limen._arrays import pack_any

LEVELS = [0.385, 1.7, 6.04]
BITS = [1, 0, 1, 0]


@pytest.mark.parametrize("bitorder", ["little", "big"])
@pytest.mark.parametrize("layout, dtype", awkward.all_readings())
def test_bits_are_numpy_s(layout, dtype, bitorder):
    x = awkward.LAYOUTS[layout](awkward.values(dtype))
    for bit in (0, 1):
        codes = np.atleast_1d(oracle.decide(x, LEVELS, BITS, invalid=bit))
        got = pack_any(x, LEVELS, BITS, bitorder=bitorder, invalid=bit)
        assert got.dtype == np.uint8
        np.testing.assert_array_equal(got, np.packbits(codes, axis=-1, bitorder=bitorder))


@pytest.mark.parametrize("n", [*range(18), 63, 64, 65, 4095, 4096, 4097, 1_000_003])
def test_every_length(n):
    x = np.random.default_rng(n).normal(size=n)
    for threads in (1, 3):
        np.testing.assert_array_equal(pack_any(x, [0.2], [0, 1], threads=threads),
                                      np.packbits(x >= 0.2, bitorder="little"))


def test_nan_needs_a_choice():
    x = np.array([1.0, np.nan, 3.0, np.nan])
    with pytest.raises(ValueError, match="2 NaN"):
        pack_any(x, [2.0], [0, 1])
    assert pack_any(x, [2.0], [0, 1], invalid=1).tolist() == [0b1110]
    masked = np.ma.array([1, 5, 9], mask=[0, 1, 0])
    with pytest.raises(ValueError, match="1 NaN or missing"):
        pack_any(masked, [2.0], [0, 1])
    assert pack_any(masked, [2.0], [0, 1], invalid=0).tolist() == [0b100]


def test_out():
    x = np.arange(20, dtype=np.int16).reshape(2, 10)
    out = np.zeros((2, 2), np.uint8)
    assert pack_any(x, [5.0], [0, 1], out=out) is out
    np.testing.assert_array_equal(out, np.packbits(x >= 5, axis=-1, bitorder="little"))
    for bad, error in ((np.zeros((2, 3), np.uint8), ValueError), (np.zeros((2, 2)), TypeError),
                       (np.zeros((2, 4), np.uint8)[:, ::2], ValueError)):
        with pytest.raises(error, match="out"):
            pack_any(x, [5.0], [0, 1], out=bad)


@pytest.mark.parametrize("codes, options, words", [
    ([0, 2], {}, "bit can only"),
    ([0, 1], {"bitorder": "middle"}, "bitorder"),
    ([0, 1], {"invalid": 2}, "invalid"),
])
def test_bad_input_is_named(codes, options, words):
    with pytest.raises(ValueError, match=words):
        pack_any([1.0], [0.5], codes, **options)
