"""Soft outputs against the exact function, for every type and layout of readings."""

import os
import pickle
import subprocess
import sys

import awkward
import numpy as np
import pytest

import limen as lm
from limen.soft import Soft

gaussian = lm.gaussian
A = lm.mixture([0.9, 0.1], [gaussian(0, 1), gaussian(0.5, 4)])
B = lm.mixture([0.8, 0.2], [gaussian(3, 0.7), gaussian(2.5, 3)])
SOFT = Soft((A, B))


def worst(got, wanted):
    """Largest error relative to max(1, |wanted|); infinities and NaN must agree."""
    got, wanted = np.asarray(got, float), np.asarray(wanted, float)
    plain = np.isfinite(wanted)
    np.testing.assert_array_equal(got[~plain], wanted[~plain])
    got, wanted = got[plain], wanted[plain]
    return np.max(np.abs(got - wanted) / np.maximum(1, np.abs(wanted)), initial=0)


def exact(x):
    """The LLR from the log densities, which do not cancel for this pair."""
    x = np.asarray(x, np.float64)
    with np.errstate(all="ignore"):
        return np.where(np.isfinite(x), A.logpdf(x) - B.logpdf(x), SOFT.exact(x))


@pytest.mark.parametrize("layout, dtype", awkward.all_readings())
def test_every_layout(layout, dtype):
    x = awkward.LAYOUTS[layout](awkward.values(dtype))
    if np.dtype(dtype).kind == "f" and np.dtype(dtype).itemsize == 8:
        x = np.where(np.abs(x) < 1e150, x, 1.0)  # beyond it squares overflow
    for kind, bound in (("float32", 1e-6), ("float64", 1e-6)):
        soft = Soft((A, B), dtype=kind)
        got = soft(x)
        assert np.shape(got) == x.shape and got.dtype == kind
        with np.errstate(over="ignore"):
            assert worst(got, exact(x).astype(kind)) <= bound
        out = np.empty((*x.shape, 2), kind)[..., 0]
        assert soft(x, out=out, threads=2) is out
        np.testing.assert_array_equal(out, got)


def test_the_whole_range_of_float32():
    """Every 4099th float32 of all bit patterns (a prime, so that mantissas vary), and a dense stretch in the middle."""
    x = np.concatenate([np.arange(0, 2**32, 4099 * 16, dtype=np.uint64).astype(np.uint32).view(np.float32),
                        np.linspace(-30, 30, 200_001, dtype=np.float32)])
    x = x[np.isfinite(x)]
    with np.errstate(over="ignore"):
        assert worst(SOFT(x), SOFT.exact(x.astype(float)).astype(np.float32)) <= 1e-6


def test_int8_is_the_rounded_llr():
    soft = Soft((A, B), dtype="int8", step=0.25)
    x = np.linspace(-8, 8, 4001)
    got = soft(x)
    assert got.dtype == np.int8
    steps = exact(x) / 0.25
    # half a step, and the error of the table
    assert np.max(np.abs(got - np.clip(steps, -127, 127))) <= 0.5 + 1e-6 * np.max(np.maximum(4, np.abs(steps)))
    assert soft([np.nan, -1e9, 1e9]).tolist() == [-128, *np.sign(exact([-1e9, 1e9])).astype(int) * 127]


def test_posteriors():
    states, priors = (A, B, gaussian(8, 1)), (0.5, 0.3, 0.2)
    x = np.linspace(-20, 30, 5001)
    joint = np.array([np.log(p) + d.logpdf(x) for p, d in zip(priors, states)])
    wanted = np.exp(joint - np.logaddexp.reduce(joint))
    got = np.array([Soft(states, priors, k, "float64")(x) for k in range(3)])
    np.testing.assert_allclose(got, wanted, rtol=0, atol=1e-6)
    np.testing.assert_allclose(got.sum(0), 1, rtol=0, atol=3e-6)


RNG = np.random.default_rng(12)
PAIRS = {
    "laplace": (lm.laplace(0, 1), lm.laplace(1.5, 0.7), (-40, 40)),
    "laplace-gaussian": (lm.laplace(0, 1), lm.gaussian(1, 2), (-40, 40)),
    "exponential": (lm.exponential(1.0), lm.exponential(3.0, 0.5), (-2, 60)),
    "uniform-gaussian": (lm.uniform(0, 2), lm.gaussian(1, 1), (-3, 5)),
    "uniform": (lm.uniform(0, 2), lm.uniform(1, 4), (-1, 5)),
    "tails": (lm.from_readings(RNG.standard_t(4, 4000)), lm.from_readings(2 + RNG.standard_t(6, 4000)), (-100, 100)),
    "moved": (2 * lm.laplace(0, 1) + 1, -1.0 * lm.exponential(1.0) + 3, (-30, 30)),
}


@pytest.mark.parametrize("name", PAIRS)
@pytest.mark.parametrize("dtype", ["float32", "float64"])
def test_laws_with_kinks_edges_and_tails(name, dtype):
    """LLRs that bend, jump to infinity, or are NaN where neither state can be, against the log densities."""
    a, b, (low, high) = PAIRS[name]
    dtype = np.dtype(dtype).type
    soft = Soft((a, b), dtype=dtype)
    edges = np.array([0.5, 1, 1.5, 2, 3, 4], dtype)
    x = np.concatenate([np.linspace(low, high, 20_001), edges, np.nextafter(edges, dtype("-9")),
                        np.nextafter(edges, dtype("9")), 1e3 * np.array([low, high])]).astype(dtype)
    with np.errstate(invalid="ignore"):
        wanted = a.logpdf(x.astype(float)) - b.logpdf(x.astype(float))
    assert worst(soft(x), wanted.astype(dtype)) <= 1e-6
    assert worst(soft.exact(x), wanted) <= 1e-12


def test_states_make_them():
    states = lm.States({"a": A, "b": B}, priors=[0.3, 0.7])
    x = np.linspace(-5, 8, 1001)
    assert worst(states.soft("a", "b", dtype="float64")(x), states.llr(x, "a", "b")) <= 1e-6
    np.testing.assert_allclose(states.soft_posterior("b", "float64")(x), states.posterior(x)[:, 1], rtol=0, atol=1e-6)
    assert isinstance(states.llr(1.0, 0, 1), float) and states.llr(x.reshape(7, -1), 0, 1).shape == (7, 143)


def test_kinds_of_arrays():
    x = np.linspace(-5, 5, 24).reshape(4, 6)
    wanted = SOFT(x)
    masked = SOFT(np.ma.array(x, mask=x > 4))
    assert np.isnan(masked.data[x > 4]).all() and (masked.mask == (x > 4)).all()
    assert isinstance(SOFT(1.0), np.float32) and SOFT([1, 2]).shape == (2,)
    da = pytest.importorskip("dask.array")
    lazy = SOFT(da.from_array(x, chunks=(2, 3)))
    assert isinstance(lazy, da.Array) and lazy.dtype == np.float32
    np.testing.assert_array_equal(lazy.compute(scheduler="threads"), wanted)


def test_it_pickles_and_says_what_it_is():
    again = pickle.loads(pickle.dumps(Soft((A, B), dtype="int8", step=0.5)))
    assert again.step == 0.5 and "LLR, int8 in steps of 0.5" in repr(again)
    assert SOFT.span[0] < -100 and SOFT.span[1] > 100 and SOFT.segments > 10


@pytest.mark.parametrize("call, error, words", [
    (lambda: Soft((A,)), ValueError, "two densities"),
    (lambda: Soft((A, "b")), TypeError, "density"),
    (lambda: Soft((A, B), dtype="int16"), TypeError, "int16"),
    (lambda: Soft((A, B), step=0.1), ValueError, "step"),
    (lambda: Soft((A, B), dtype="int8", step=0), ValueError, "step"),
    (lambda: Soft((A, B), (0.5, -0.5)), ValueError, "priors"),
    (lambda: Soft((A, B), (0.5, 0.3, 0.2)), ValueError, "priors"),
    (lambda: Soft((A, B), (0.5, 0.5), dtype="int8"), TypeError, "posterior"),
    (lambda: SOFT([1.0], out=np.zeros(1)), TypeError, "out"),
    (lambda: SOFT([1.0], out=np.zeros(2, "f4")), ValueError, "out"),
    (lambda: SOFT(["a"]), TypeError, "real numbers"),
])
def test_bad_input_is_named(call, error, words):
    with pytest.raises(error, match=words):
        call()


def test_every_set_of_kernels_gives_the_same_bits():
    code = """
import hashlib, numpy as np, limen as lm
from limen.soft import Soft
a, b = lm.mixture([0.9, 0.1], [lm.gaussian(0, 1), lm.gaussian(0.5, 4)]), lm.gaussian(3, 0.7)
x = np.random.default_rng(1).normal(1, 4, 100_003)
digest = hashlib.sha256()
for kind in ("float32", "float64", "int8"):
    for readings in (x, x.astype("f4"), (100 * x).astype("i2")):
        digest.update(Soft((a, b), dtype=kind)(readings).tobytes())
print(lm.build_info()["kernels"], digest.hexdigest())
"""
    said = set()
    for name in lm.build_info()["usable_kernels"]:
        done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True,
                              env={**os.environ, "LIMEN_CPU": name})
        assert done.returncode == 0, done.stderr
        ran, digest = done.stdout.split()
        assert ran == name
        said.add(digest)
    assert len(said) == 1
