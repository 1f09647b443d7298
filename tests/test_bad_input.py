"""Bad input is answered by an exception that names the argument, the value and what was expected; nothing else."""

import json
import os

import numpy as np
import pytest

import limen as lm

NAN, INF = float("nan"), float("inf")
EMPTY, CAP = lm.gaussian(0.8, 0.05), lm.gaussian(1.3, 0.07)
STATES = lm.States({"empty": EMPTY, "cap": CAP}, priors=[0.02, 0.98])
RULE = lm.bayes(STATES)


def states(priors=(0.5, 0.5), densities=(EMPTY, CAP)):
    return lm.States({f"state {k}": d for k, d in enumerate(densities)}, priors=list(priors))


# id, the call, the exception, and words that its message must hold
CASES = [
    ("sd negative", lambda: lm.gaussian(0.0, -1.25), ValueError, ["sd", "-1.25", "expected"]),
    ("sd zero", lambda: lm.gaussian(0.0, 0.0), ValueError, ["sd is 0", "expected"]),
    ("sd infinite", lambda: lm.gaussian(0.0, INF), ValueError, ["sd", "inf", "expected"]),
    ("mean nan", lambda: lm.gaussian(NAN, 1.0), ValueError, ["mean", "nan", "expected"]),
    ("mean text", lambda: lm.gaussian("high", 1.0), TypeError, []),
    ("scale negative", lambda: lm.laplace(0.0, -2.5), ValueError, ["scale", "-2.5"]),
    ("scale zero", lambda: lm.exponential(0.0), ValueError, ["scale is 0"]),
    ("uniform reversed", lambda: lm.uniform(2.0, 1.25), ValueError, ["high", "1.25"]),
    ("poisson negative", lambda: lm.poisson(-3.5), ValueError, ["mean", "-3.5"]),
    ("counts against continuous", lambda: lm.bayes(states(densities=(EMPTY, lm.poisson(3.0)))), ValueError, []),
    ("point nan", lambda: lm.point(float("nan")), ValueError, ["value", "nan"]),
    ("weights negative", lambda: lm.mixture([1.5, -0.5], [EMPTY, CAP]), ValueError, ["weights", "-0.5"]),
    ("weights too few", lambda: lm.mixture([1.0], [EMPTY, CAP]), ValueError, ["weights"]),
    ("weights sum", lambda: lm.mixture([0.5, 0.6], [EMPTY, CAP]), ValueError, ["weights", "1.1"]),
    ("mixture of nothing", lambda: lm.mixture([], []), ValueError, []),
    ("mixture of text", lambda: lm.mixture([1.0], ["gaussian"]), TypeError, []),
    ("scaled by zero", lambda: 0.0 * EMPTY, ValueError, []),
    ("shifted by nan", lambda: EMPTY + NAN, ValueError, []),
    ("logpdf of text", lambda: EMPTY.logpdf("x"), (TypeError, ValueError), []),
    ("logpdf of complex", lambda: EMPTY.logpdf(1j), TypeError, []),
    ("ppf above 1", lambda: EMPTY.ppf(1.5), ValueError, ["1.5"]),
    ("one state", lambda: states([1.0], [EMPTY]), ValueError, ["state"]),
    ("priors sum", lambda: states([0.5, 0.6]), ValueError, ["priors", "1.1"]),
    ("priors negative", lambda: states([1.5, -0.5]), ValueError, ["priors", "-0.5"]),
    ("priors nan", lambda: states([NAN, 0.5]), ValueError, ["priors", "nan"]),
    ("priors too many", lambda: states([0.5, 0.25, 0.25]), ValueError, ["priors", "3", "2"]),
    ("density text", lambda: states(densities=(EMPTY, "cap")), TypeError, []),
    ("costs ragged", lambda: lm.bayes(STATES, [[0, 1], [1]]), ValueError, ["costs"]),
    ("costs of one decision too many states", lambda: lm.bayes(STATES, [[0, 1, 2], [1, 0, 2]]), ValueError, ["costs"]),
    ("costs nan", lambda: lm.bayes(STATES, [[0, NAN], [1, 0]]), ValueError, ["costs", "nan"]),
    ("costs of nobody", lambda: lm.bayes(STATES, {("cap", "full"): 2.0}), ValueError, ["costs", "full"]),
    ("decisions too few", lambda: lm.bayes(STATES, np.zeros((3, 2)), ["empty", "cap"]), ValueError, ["decisions"]),
    ("levels in no order", lambda: lm.rule([2.0, 1.0], [0, 1, 0], ["a", "b"]), ValueError, ["levels"]),
    ("levels nan", lambda: lm.rule([NAN], [0, 1], ["a", "b"]), ValueError, ["levels", "nan"]),
    ("decisions and levels", lambda: lm.rule([1.0], [0, 1, 0], ["a", "b"]), ValueError, ["decisions"]),
    ("decision without name", lambda: lm.rule([1.0], [0, 2], ["a", "b"]), ValueError, ["decisions", "2"]),
    ("readings complex", lambda: RULE(np.array([1j])), TypeError, ["complex"]),
    ("readings text", lambda: RULE(["one"]), TypeError, []),
    ("out float", lambda: RULE.decide(np.zeros(3), out=np.zeros(3)), (TypeError, ValueError), ["out", "uint8"]),
    ("out too short", lambda: RULE.decide(np.zeros(3), out=np.zeros(2, np.uint8)), ValueError, ["out"]),
    ("threads zero", lambda: RULE.decide(np.zeros(3), threads=0), ValueError, ["threads", "0"]),
    ("truth too short", lambda: RULE.tally(np.zeros(3), [0, 1]), ValueError, ["truth"]),
    ("truth unknown", lambda: RULE.tally(np.zeros(3), [0, 1, 7]), ValueError, ["truth", "7"]),
    ("more errors than trials", lambda: lm.error_bounds(5, 4), ValueError, ["errors", "5"]),
    ("errors negative", lambda: lm.error_bounds(-1, 4), ValueError, ["errors", "-1"]),
    ("confidence 1.5", lambda: lm.error_bounds(1, 4, 1.5), ValueError, ["confidence", "1.5"]),
    ("readings none", lambda: lm.from_readings([]), ValueError, ["readings"]),
    ("readings nan", lambda: lm.from_readings([NAN] * 100), ValueError, ["readings"]),
    ("tails unknown", lambda: lm.from_readings(np.arange(1000.0), tails="long"), ValueError, ["tails", "long"]),
]


@pytest.mark.parametrize(("call", "exception", "words"), [row[1:] for row in CASES], ids=[row[0] for row in CASES])
def test_bad_input_is_answered(call, exception, words):
    with pytest.raises(exception) as caught:
        call()
    assert [word for word in words if word not in str(caught.value)] == [], str(caught.value)


def test_out_that_cannot_be_written_is_refused_untouched():
    out = np.full(3, 77, np.uint8)
    out.flags.writeable = False
    with pytest.raises(ValueError, match="out|read-only"):
        RULE.decide(np.zeros(3), out=out)
    assert out.tolist() == [77, 77, 77]


# --- files --------------------------------------------------------------------------------------------------------
@pytest.fixture
def saved(tmp_path):
    RULE.save(tmp_path / "rule.json")
    return tmp_path / "rule.json"


def test_a_truncated_file_is_refused_at_any_length(saved):
    whole = saved.read_bytes()
    for length in range(len(whole.rstrip())):
        saved.write_bytes(whole[:length])
        with pytest.raises(ValueError, match="rule.json"):
            lm.load(saved)


@pytest.mark.parametrize(
    ("key", "value"),
    [("format", "something else"), ("version", 999), ("version", "1"), ("levels", "low"), ("levels", [2.0, 1.0]),
     ("levels", None), ("decisions", [0]), ("decisions", [0, 250]), ("names", [1, 2])],
)
def test_a_file_with_a_wrong_entry_is_refused(saved, key, value):
    content = json.loads(saved.read_text(encoding="utf-8"))
    assert key in content
    content[key] = value
    saved.write_text(json.dumps(content), encoding="utf-8")
    with pytest.raises(ValueError, match=key):
        lm.load(saved)


def test_a_file_with_a_missing_entry_is_refused(saved):
    content = json.loads(saved.read_text(encoding="utf-8"))
    for key in content:
        saved.write_text(json.dumps({k: v for k, v in content.items() if k != key}), encoding="utf-8")
        with pytest.raises(ValueError, match=key):
            lm.load(saved)


def test_a_file_that_is_not_there_is_the_usual_error(tmp_path):
    with pytest.raises(FileNotFoundError):
        lm.load(tmp_path / "none.json")


def test_a_save_that_fails_leaves_nothing_half_written(tmp_path):
    with pytest.raises(OSError):
        RULE.save(tmp_path / "no such folder" / "rule.json")
    (tmp_path / "taken").mkdir()
    with pytest.raises(OSError):
        RULE.save(tmp_path / "taken")
    assert os.listdir(tmp_path) == ["taken"] and os.listdir(tmp_path / "taken") == []
