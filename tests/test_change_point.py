"""Change points against twins, published critical values and another program."""

import json
from pathlib import Path

import numpy as np
import pytest
from naive import long_run as slow

from sercheck.serial.arrays import as_series
from sercheck.serial.change_point import (
    bridge_quantile,
    bridge_tail,
    cusum,
    most_likely_break,
    self_normalized,
    self_normalized_quantile,
    self_normalized_tail,
)

REFERENCE = Path(__file__).parent / "reference"
OPEN = json.loads((REFERENCE / "reference_open.json").read_text(encoding="utf-8"))["series"]


def read(name):
    """A reference series."""
    lines = (REFERENCE / "data" / f"{name}.csv").read_text(encoding="utf-8").splitlines()[1:]
    return np.array([float(line.split(",")[2] or "nan") for line in lines])


@pytest.mark.parametrize("name", ["Nile", "LakeHuron", "lh", "nist_michelso", "nist_normal_random"])
def test_cusum_of_strucchange(name):
    """K over the standard deviation and its p-value are what R's strucchange 1.5-3 prints for OLS-CUSUM."""
    told = {entry["name"]: entry["value"] for entry in OPEN[name]["values"]}
    x = read(name)
    statistic = cusum(x)[0] / np.std(x, ddof=1)
    np.testing.assert_allclose(statistic, told["ols_cusum_stat"], rtol=1e-9)
    p = bridge_tail(np.array([statistic]), np.inf)[0]
    np.testing.assert_allclose(p, told["ols_cusum_p"], rtol=1e-6, atol=1e-12)


def test_nile():
    """The Nile at Aswan fell by 248 in 1899 (Cobb 1978): the change begins at the 29th year."""
    found = most_likely_break(read("Nile"))
    assert found.place[0] == 28
    np.testing.assert_allclose(found.change[0], 849.97 - 1097.75, atol=0.01)


def test_kolmogorov_points():
    """1.3581, 1.6276 and 1.9495 are exceeded with .05, .01 and .001 (Smirnov 1948)."""
    np.testing.assert_allclose(bridge_tail(np.array([1.3581, 1.6276, 1.9495]), np.inf), [0.05, 0.01, 0.001], rtol=2e-3)


def test_tail_with_estimated_scale():
    """The tail with a χ² scale is the mean of the tail over simulated scales."""
    scale = np.sqrt(np.random.default_rng(1).chisquare(9, size=400_000) / 9)
    simulated = [bridge_tail(k * scale, np.inf).mean() for k in (1.0, 1.8, 2.6)]
    np.testing.assert_allclose(bridge_tail(np.array([1.0, 1.8, 2.6]), 9.0), simulated, rtol=0.02)


def test_quantile_is_the_inverse():
    """The quantile has the tail that was asked, for every risk and degrees of freedom."""
    risk, df = np.array([0.3, 0.01, 1e-5]), np.array([np.inf, 7.0, 20.0])
    np.testing.assert_allclose(bridge_tail(bridge_quantile(risk, df), df), risk, rtol=1e-9)
    assert np.isnan(bridge_quantile(np.array([np.nan]), np.array([4.0]))).all()


def test_self_normalized_twin():
    """The statistic from running sums is that of its definition."""
    x = np.random.default_rng(2).normal(size=(5, 30))
    np.testing.assert_allclose(self_normalized(x), [slow.self_normalized(row) for row in x], rtol=1e-9)


def test_self_normalized_table():
    """Tail and quantile are inverse to each other, and exceeded as often as the table says."""
    risk = np.array([0.4, 0.05, 0.003, 1e-6])
    np.testing.assert_allclose(self_normalized_tail(self_normalized_quantile(risk, 200), 200), risk, rtol=1e-9)
    g = self_normalized(np.random.default_rng(3).normal(size=(20_000, 120)))
    assert abs((self_normalized_tail(g, 120) <= 0.05).mean() - 0.05) < 0.006


def test_self_normalized_published():
    """Critical values for long series are those of Shao and Zhang (2010), 29.6 and 40.1 at .1 and .05, within 3 %."""
    np.testing.assert_allclose(self_normalized_quantile(np.array([0.1, 0.05]), 1000), [29.6, 40.1], rtol=0.03)


def test_no_break_in_nothing():
    """Constant, missing and very short series have no place and no warning."""
    for x in ([np.nan] * 9, [1.0], np.empty((1, 0))):
        found = most_likely_break(x)
        assert found.place[0] == -1
        assert np.isnan(found.change[0])
    assert most_likely_break(np.ones(40)).change[0] == 0
    assert np.isnan(self_normalized(np.ones(40)))[0]
    assert as_series(cusum(np.ones(40))).max() == 0
