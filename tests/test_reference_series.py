"""The open series through the gate: what its records observe is what R computes."""

import json
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

import sercheck

FOLDER = Path(__file__).parent / "reference"
KNOWN = json.loads((FOLDER / "reference_open.json").read_text(encoding="utf-8"))["series"]
EVERY = {
    "AirPassengers": "MS", "co2": "MS", "nottem": "MS", "UKgas": "QS", "presidents": "QS", "macrodata_realgdp": "QS",
    "lynx": "YS", "LakeHuron": "YS", "Nile": "YS", "nag_sunspots50": "YS", "airquality_ozone": "D",
}  # fmt: skip
"""Cadence of the series with dated periods; the others are numbered and judged in order of observation."""


def records(name, rules):
    """The records of a batch that is the whole series."""
    every = EVERY.get(name, "irregular")
    text = f"feed: {name}\ncolumns: {{time: period, values: [value]}}\nevery: {every}\nrules:\n{rules}"
    return sercheck.gate(sercheck.load_rules(text), FOLDER / "data" / f"{name}.csv").records


def expected(name, what):
    """R's values (4.2.2, package stats)."""
    names = (what, f"{what}_na_pass")  # the second for series with missing values
    found = [entry["value"] for entry in KNOWN[name]["values"] if entry["name"] in names]
    return np.array(found[0], dtype=float) if found else None


def close(observed, wanted):
    """To 1e-9 relative; R's own rounding decides below 1e-12 absolute."""
    np.testing.assert_allclose(np.asarray(observed, dtype=float), wanted, rtol=1e-9, atol=1e-12)


def rule(name, measure, lags, after=""):
    """One rule that looks at lags."""
    return f"  - {{name: {name}, measure: {measure}, lags: {list(lags)}, {after}stays: {{below: 0.9}}}}\n"


@pytest.mark.parametrize("name", sorted(KNOWN))
def test_autocorrelations_are_those_of_r(name):
    """acf, pacf, and acf after a difference, a second one and a seasonal one, as far as R's values go."""
    season = KNOWN[name]["season"]
    asked = {
        "acf": ("autocorrelation", ""),
        "pacf": ("partial_autocorrelation", ""),
        "acf_diff1": ("autocorrelation", "after: difference, "),
        "acf_diff2": ("autocorrelation", "after: [difference, difference], "),
        "acf_seasonal_diff": ("autocorrelation", f"after: {{difference: {season}}}, "),
        "acf_diff1_seasonal_diff": ("autocorrelation", f"after: [{{difference: {season}}}, difference], "),
        "acf_linear_detrended": ("autocorrelation", "after: detrended, "),
    }
    wanted = {what: values for what in asked if (values := expected(name, what)) is not None}
    assert {"acf", "pacf"} <= set(wanted)
    rules = "".join(rule(what, asked[what][0], range(1, len(v) + 1), asked[what][1]) for what, v in wanted.items())
    told = records(name, rules)
    for what, values in wanted.items():
        close(told.loc[told["rule"] == what, "observed"], values)


def test_missing_values_take_part_as_stated():
    """Complete pairs over pairs plus lag, as R's na.pass: ozone of 153 days, 37 of them missing."""
    told = records("airquality_ozone", rule("acf", "autocorrelation", [1]))
    values = pd.read_csv(FOLDER / "data" / "airquality_ozone.csv")["value"].to_numpy()
    seen = ~np.isnan(values)
    d = np.where(seen, values - values[seen].mean(), 0.0)
    pairs = np.count_nonzero(seen[1:] & seen[:-1])
    close(told["observed"], [(d[1:] @ d[:-1] / (pairs + 1)) / (d @ d / seen.sum())])
    assert told["observed"][0] == pytest.approx(0.5615, abs=5e-5)  # as the definitions beside the data print it
    assert told["n_missing"][0] == 37
