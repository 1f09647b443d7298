"""The main job on the recordings, as its command runs it: what it must reach, and what it must leave behind."""

import json
import os
import re
import subprocess
import sys
from pathlib import Path

import pytest

pytest.importorskip("matplotlib")
ROOT = Path(__file__).resolve().parent.parent
SETS = {"latency_two": 2, "latency_four": 4}


@pytest.fixture(scope="module")
def said():
    run = subprocess.run([sys.executable, ROOT / "notebooks/main_job.py"], capture_output=True, text=True, check=True,
                         env={**os.environ, "MPLBACKEND": "Agg"})
    parts = re.split(r"^=== (\w+):.*$", run.stdout, flags=re.M)
    return dict(zip(parts[1::2], parts[2::2]))


@pytest.mark.parametrize("name", SETS)
def test_measured_is_near_the_floor_and_predicted_near_measured(said, name):
    """Within 3 % of the least error that any rule could reach on the readings counted; predicted within 10 %."""
    ratio = float(re.search(r"measured is ([\d.]+) of that", said[name]).group(1))
    assert 1 <= ratio < 1.03
    predicted, measured = map(float, re.search(r"predicted ([\d.]+)   measured ([\d.]+)", said[name]).groups())
    assert abs(predicted / measured - 1) < 0.1


@pytest.mark.parametrize("name", SETS)
def test_levels_are_few_and_files_are_there(said, name):
    rule = json.loads((ROOT / f"notebooks/out/{name}.json").read_text(encoding="utf-8"))
    assert len(rule["names"]) == SETS[name]
    assert len(rule["levels"]) <= 6 * SETS[name]
    for suffix, start in ((".h", b"/* Decision levels"), (".png", b"\x89PNG"), (".html", b"<!DOCTYPE html>")):
        assert (ROOT / f"notebooks/out/{name}{suffix}").read_bytes().startswith(start)
