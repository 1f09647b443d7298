"""How long a fit to a million readings takes, beside the sort that it cannot do without. Nothing is asserted."""

import numpy as np
import pytest

import limen as lm

pytest.importorskip("pytest_benchmark")

RANDOM = np.random.default_rng(2)
READINGS = {
    "heavy tails": RANDOM.standard_t(3, 1_000_000),
    "converter codes": np.round(RANDOM.normal(0, 300, 1_000_000)).astype(np.int32),
}


@pytest.mark.parametrize("name", READINGS)
@pytest.mark.parametrize("job", [lm.from_readings, np.sort], ids=["from_readings", "sort"])
def test_a_million_readings(benchmark, job, name):
    benchmark.pedantic(job, (READINGS[name],), rounds=5)
