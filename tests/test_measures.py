"""One battery for every measure that is found: shapes, purity, invariance, p-value and limit, documentation."""

from __future__ import annotations

import dataclasses
import re
import sys
import textwrap
from functools import cache

import numpy as np
import pytest
import yaml
from click.testing import CliRunner
from panels import LENGTHS, clock_of, healthy, panel_of

from sercheck.cli.measures import command
from sercheck.errors import UsageError
from sercheck.grid import Panel
from sercheck.measure import Measurement, Question, Stays
from sercheck.measures import get, names, text_of
from sercheck.rulebook import load_rules
from sercheck.rulebook.compiled import Rule
from sercheck.rulebook.model import RuleKeys

N, M = 1344, 168
"""Steps of history and window: eight weeks, and one."""

HEAD = """feed: heat
columns: {time: read_at, series: substation, values: [kwh, flow, mw, m3, calls, residual, value]}
every: 1h
seasons: {day: 1D, week: 7D, year: 28D}
rules:
"""


def example_of(name: str) -> str:
    """The YAML under 'Example::' of a measure's documentation, as a list of rules."""
    text = textwrap.dedent(re.split(r"^\s*Example::\s*$", text_of(get(name)), flags=re.MULTILINE)[1]).strip("\n")
    kept = textwrap.dedent(text)
    return kept if kept.startswith("-") else "- " + textwrap.indent(kept, "  ").lstrip()


@cache
def rules_of(name: str) -> tuple[Rule, ...]:
    """The documentation's example, compiled; each rule is given the measure's name where it is."""
    return load_rules(HEAD + textwrap.indent(example_of(name), "  ") + "\n").rules


def bounds_of(name: str) -> list[Stays]:
    """One bound of every kind that the measure accepts, with numbers that it can take."""
    measure = get(name)
    low, high = (0.2, 0.4) if measure.span != (float("-inf"), float("inf")) else (0.1, 0.6)
    every = [
        Stays("below", high=high),
        Stays("above", low=low),
        Stays("between", low, high),
        Stays("like_history"),
        Stays("present"),
    ]
    return [stays for stays in every if stays.kind in measure.kinds]


CASES = [(name, stays) for name in names() for stays in bounds_of(name)]
IDS = [f"{name}-{stays.kind}" for name, stays in CASES]

BASE = healthy(3, N + M, seed=11)
HOLES = np.where(np.random.default_rng(12).random(BASE.shape) < 0.3, np.nan, BASE)
INPUTS = {
    "healthy": (BASE, N),
    "no history": (BASE, 0),
    "constant": (np.full((3, N + M), 5.0), N),
    "constant without history": (np.full((3, M), 5.0), 0),
    "zero": (np.zeros((3, N + M)), N),
    "no series": (np.empty((0, N + M)), N),
    "one row": (BASE[:, :1], 0),
    "three rows": (BASE[:, :3], 0),
    "short": (BASE[:, :40], 30),
    "all missing": (np.full((3, N + M), np.nan), N),
    "window missing": (np.where(np.arange(N + M) < N, BASE, np.nan), N),
    "history missing": (np.where(np.arange(N + M) >= N, BASE, np.nan), N),
    "holes": (HOLES, N),
    "one value": (np.where(np.arange(N + M) == N + 3, BASE, np.nan), N),
    "huge": (BASE * 1e299, N),
    "huge without history": (BASE * 1e299, 0),
    "huge of both signs": ((BASE - 20.0) * 1e300, N),
    "tiny": (BASE * 1e-301, N),
    "shifted": (BASE + 1e9, N),
    "counts": (np.round(BASE), N),
}


def question(name: str, stays: Stays, panel: Panel, risk: float = 0.01) -> Question:
    """What the example's rule asks, with another bound."""
    return Question(rules_of(name)[0].fields, stays, risk, dict(LENGTHS), clock_of(panel))


def run(name: str, stays: Stays, panel: Panel, risk: float = 0.01) -> Measurement:
    """Run a measure as the engine does."""
    measure = get(name)
    if not measure.of_values:
        panel = dataclasses.replace(panel, values=np.where(panel.delivered, 1.0, np.nan), column="", shared={})
    later = panel_of(np.roll(panel.values, 3, axis=1), panel.start)
    panel = dataclasses.replace(panel, beside=dict.fromkeys(measure.beside(rules_of(name)[0].fields), later))
    return measure.run(panel, question(name, stays, panel, risk))


def decided(seen: Measurement) -> np.ndarray:
    """Cells that have no reason to stay undecided, whatever the p-value."""
    unsure = getattr(seen, "unsure", None)
    return (seen.undecided < 0) & (unsure is None or unsure < 0)


def p_values(seen: Measurement) -> list[np.ndarray]:
    """The p-values of the sides that the rule looks at, NaN where it is undecided."""
    sides = [(seen.upper, "upper"), (seen.lower, "lower")]
    return [np.where(decided(seen), law.p_value(side), np.nan) for law, side in sides if law is not None]


@pytest.mark.parametrize("given", INPUTS)
@pytest.mark.parametrize(("name", "stays"), CASES, ids=IDS)
def test_any_input_gives_a_whole_measurement_or_a_reason(name, stays, given):
    """Shapes fit, numbers are finite or missing, an undecided cell has a sentence, a decided one p-value and limit."""
    values, start = INPUTS[given]
    panel = panel_of(values, start)
    seen = run(name, stays, panel)
    shape = (len(values), len(seen.lags) if seen.lags else 1)
    for array in (seen.observed, seen.n, seen.n_missing, seen.n_eff, seen.undecided):
        assert array.shape == shape
    assert not np.isinf(seen.observed).any()
    assert seen.n.dtype.kind == seen.n_missing.dtype.kind == "i"
    assert (seen.n >= 0).all()
    assert (seen.n_missing >= 0).all()
    assert ((seen.undecided >= -1) & (seen.undecided < len(seen.reasons))).all()
    assert all(len(reason.split()) > 2 and "nan" not in reason.lower().split() for reason in seen.reasons)
    assert seen.method
    assert seen.assumes
    told = decided(seen)
    assert np.isfinite(seen.observed[told]).all()
    for law, side in ((seen.upper, "upper"), (seen.lower, "lower")):
        if law is None:
            continue
        p, limit = law.p_value(side), law.limit(side, np.full(shape, 0.01))
        assert np.broadcast_shapes(p.shape, shape) == shape
        assert ((p[told] >= 0) & (p[told] <= 1)).all()
        assert not np.isnan(np.broadcast_to(limit, shape)[told]).any()


@pytest.mark.parametrize(("name", "stays"), CASES, ids=IDS)
def test_the_sides_are_those_of_the_bound(name, stays):
    """A bound below looks up, a bound above looks down, between looks both ways, and every bound looks somewhere."""
    seen = run(name, stays, panel_of(BASE, N))
    looks = (seen.upper is not None, seen.lower is not None)
    wanted = {"below": (True, False), "above": (False, True), "between": (True, True)}
    assert looks == wanted[stays.kind] if stays.kind in wanted else any(looks)


@pytest.mark.parametrize("given", ["healthy", "no history", "constant", "holes", "counts", "shifted"])
@pytest.mark.parametrize(("name", "stays"), CASES, ids=IDS)
def test_the_p_value_is_at_the_risk_where_the_observation_is_at_the_limit(name, stays, given):
    """A p-value is at or under a risk exactly when the observation lies at or beyond the limit, for any risk."""
    seen = run(name, stays, panel_of(*INPUTS[given]))
    told = decided(seen)
    for law, side, sign in ((seen.upper, "upper", 1.0), (seen.lower, "lower", -1.0)):
        for risk in (0.4, 0.05, 0.01, 0.001) if law is not None else ():
            p = np.broadcast_to(law.p_value(side), told.shape)[told]
            limit = np.broadcast_to(law.limit(side, np.full(told.shape, risk)), told.shape)[told]
            beyond = sign * (seen.observed[told] - limit)
            slack = 1e-7 * (1 + np.abs(limit))
            assert (beyond[p < risk * (1 - 1e-6)] >= -slack[p < risk * (1 - 1e-6)]).all()
            assert (beyond[p > risk * (1 + 1e-6)] <= slack[p > risk * (1 + 1e-6)]).all()


@pytest.mark.parametrize(("name", "stays"), CASES, ids=IDS)
def test_a_smaller_risk_never_brings_the_limit_nearer(name, stays):
    """The limit moves away from the bound as the risk shrinks."""
    seen = run(name, stays, panel_of(BASE, N))
    told = decided(seen)
    for law, side, sign in ((seen.upper, "upper", 1.0), (seen.lower, "lower", -1.0)):
        if law is not None:
            limits = [sign * law.limit(side, np.full(told.shape, risk))[told] for risk in (0.2, 0.02, 0.002)]
            assert (np.diff(limits, axis=0) >= -1e-9 * np.abs(limits[0])).all()


@pytest.mark.parametrize(("name", "stays"), CASES, ids=IDS)
def test_a_measure_changes_nothing_that_it_is_given(name, stays):
    """Arrays that cannot be written to are enough, and come out as they went in; twice gives the same."""
    panel = panel_of(HOLES, N)
    before = panel.values.copy()
    first, second = run(name, stays, panel), run(name, stays, panel_of(HOLES, N))
    np.testing.assert_array_equal(panel.values, before)
    np.testing.assert_array_equal(first.observed, second.observed)
    for one, other in zip(p_values(first), p_values(second), strict=True):
        np.testing.assert_array_equal(one, other)


@pytest.mark.parametrize(("name", "stays"), CASES, ids=IDS)
def test_series_do_not_disturb_each_other(name, stays):
    """The order of series, and what else is in the block, changes nothing for a series."""
    mixed = np.concatenate([HOLES, BASE * 1e12, np.full((1, N + M), 7.0), np.full((1, N + M), np.nan)])
    alone, block = run(name, stays, panel_of(HOLES, N)), run(name, stays, panel_of(mixed[::-1], N))
    np.testing.assert_allclose(block.observed[::-1][:3], alone.observed, rtol=1e-7)
    np.testing.assert_array_equal(decided(block)[::-1][:3], decided(alone))
    for one, other in zip(p_values(alone), p_values(block), strict=True):
        np.testing.assert_allclose(other[::-1][:3], one, rtol=1e-5, atol=1e-12)


@pytest.mark.parametrize("name", [name for name in names() if "like_history" in get(name).kinds])
def test_a_change_of_unit_changes_no_verdict(name):
    """Four times the values: the observation is the same or four times as large, the p-value stays."""
    stays = Stays("like_history")
    once, scaled = run(name, stays, panel_of(BASE, N)), run(name, stays, panel_of(BASE * 4.0, N))
    same = [np.allclose(scaled.observed, factor * once.observed, rtol=1e-6, equal_nan=True) for factor in (1.0, 4.0)]
    assert any(same)
    for one, other in zip(p_values(once), p_values(scaled), strict=True):
        np.testing.assert_allclose(other, one, rtol=1e-5, atol=1e-12)


@pytest.mark.parametrize("memory", [0.0, 0.7])
@pytest.mark.parametrize("name", [name for name in names() if "like_history" in get(name).kinds])
def test_healthy_series_seldom_fail(name, memory):
    """Of 400 series that are like their history, at a risk of .05 no more fail than 1.6 times the risk allows."""
    from scipy.stats import binom

    seen = run(name, Stays("like_history"), panel_of(healthy(400, N + M, seed=13, memory=memory), N), risk=0.05)
    sides = p_values(seen)
    p = np.minimum(1.0, len(sides) * np.min(sides, axis=0))[:, 0]
    failed, judged = int((p <= 0.05).sum()), int((~np.isnan(p)).sum())
    assert failed <= binom.ppf(0.9999, judged, 1.6 * 0.05)


@pytest.mark.parametrize("name", names())
def test_the_documentation_is_whole(name):
    """Question, source with its year, missing-value policy, least size and an example that compiles to this measure."""
    text = text_of(get(name))
    assert re.match(r"^[A-Z].{10,110}[.?]$", text.splitlines()[0])
    assert "missing" in text.lower()
    assert "minimum" in text.lower()
    assert get(name).exact or re.search(r"\b(1[89]|20)\d\d\b", text)
    assert [rule.measure for rule in rules_of(name)] == [name] * len(rules_of(name))
    assert isinstance(yaml.safe_load(example_of(name)), list)


@pytest.mark.parametrize("name", names())
def test_the_fields_are_strict_and_frozen(name):
    """An unknown field is refused, and a field cannot be changed."""
    config = get(name).Fields.model_config
    assert config.get("extra") == "forbid"
    assert config.get("frozen") is True


@pytest.mark.parametrize("name", names())
def test_the_command_prints_a_measure(name):
    """Its documentation and each of its fields are on the page."""
    page = CliRunner().invoke(command, [name])
    assert page.exit_code == 0
    assert text_of(get(name)).splitlines()[0] in page.output
    assert all((field.alias or key) in page.output for key, field in get(name).Fields.model_fields.items())
    common = page.output.split("Keys of every rule:\n")[1].splitlines()
    assert [line.split()[0] for line in common] == list(RuleKeys.model_fields)
    assert all(len(line.split()) > 3 and len(line) <= 100 for line in common)


def test_the_command_lists_every_measure():
    """One line each, in the order of names; as JSON the same names."""
    listed = CliRunner().invoke(command, []).output.splitlines()
    assert [line.split()[0] for line in listed] == list(names())
    told = yaml.safe_load(CliRunner().invoke(command, ["--format", "json"]).output)
    assert [line["name"] for line in told] == list(names())


def test_an_unknown_measure_is_told_with_the_nearest_one():
    """A slip of the finger is met with what was meant."""
    with pytest.raises(UsageError, match="Did you mean level"):
        get("levle")


OUTSIDE = '''"""Scratch."""
from typing import ClassVar
import numpy as np
from pydantic import BaseModel, ConfigDict, Field
from sercheck.measure import Measure, Measurement
from sercheck.reference import Exact

class Fields(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True)
    power: int = Field(default=1, ge=1)

class Bumpiness(Measure):
    """How rough is the series?

    Mean absolute step, missing values left out."""
    kinds = frozenset({"below"})
    exact: ClassVar[bool] = True
    Fields = Fields

    def run(self, panel, question):
        seen = np.nanmean(np.abs(np.diff(panel.window, axis=1)) ** question.fields.power, axis=1)[:, None]
        n = (~np.isnan(panel.window)).sum(axis=1)[:, None]
        law = Exact(seen, np.full(seen.shape, question.stays.high))
        return Measurement(seen, n, panel.window.shape[1] - n, n * 1.0, law, None, np.full(seen.shape, -1), (),
                           "mean absolute step", "nothing", exact=True)
'''


def announce(folder, name: str, target: str, source: str = OUTSIDE) -> None:
    """Install a scratch package with an entry point into a folder."""
    module = target.partition(":")[0]
    (folder / f"{module}.py").write_text(source)
    info = folder / f"{module}-1.0.dist-info"
    info.mkdir()
    (info / "METADATA").write_text(f"Metadata-Version: 2.1\nName: {module}\nVersion: 1.0\n")
    (info / "entry_points.txt").write_text(f"[sercheck.measures]\n{name} = {target}\n")


def test_a_measure_of_another_package_is_found_and_run(tmp_path, monkeypatch):
    """A class announced by entry point is listed, compiled, measured and printed like one of ours."""
    announce(tmp_path, "bumpiness", "scratch_bumpiness:Bumpiness")
    monkeypatch.syspath_prepend(tmp_path)
    assert "bumpiness" in names()
    text = HEAD + "  - {name: smooth, measure: bumpiness, power: 2, stays: {below: 3}}\n"
    rule = load_rules(text).rules[0]
    assert rule.fields.power == 2
    panel = panel_of(BASE, N)
    seen = get("bumpiness").run(panel, Question(rule.fields, rule.stays, rule.false_alarm))
    np.testing.assert_allclose(seen.observed[:, 0], np.mean(np.diff(BASE[:, N:], axis=1) ** 2, axis=1))
    assert "How rough is the series?" in CliRunner().invoke(command, ["bumpiness"]).output
    monkeypatch.undo()
    assert "bumpiness" not in names()


@pytest.mark.parametrize(
    ("source", "reason"),
    [
        ("import no_such_package\n", "ModuleNotFoundError: No module named 'no_such_package'"),
        ("class Bumpiness: pass\n", "is not a subclass"),
        ("x = 1\n", "has no attribute 'Bumpiness'"),
        ("def broken(:\n", "SyntaxError"),
    ],
)
def test_a_broken_measure_fails_with_its_name_and_reason(tmp_path, monkeypatch, source, reason):
    """A rule that asks for it is not read as if there were no such measure."""
    announce(tmp_path, "bumpiness", "scratch_broken:Bumpiness", source)
    monkeypatch.syspath_prepend(tmp_path)
    sys.modules.pop("scratch_broken", None)
    with pytest.raises(UsageError, match="measure bumpiness") as caught:
        load_rules(HEAD + "  - {name: smooth, measure: bumpiness, stays: {below: 3}}\n")
    assert reason in caught.value.sentence()


def test_two_measures_of_one_name_are_an_error(tmp_path, monkeypatch):
    """A package cannot take the place of a measure of ours unseen."""
    announce(tmp_path, "level", "scratch_level:Bumpiness")
    monkeypatch.syspath_prepend(tmp_path)
    with pytest.raises(UsageError, match="two measures have this name"):
        names()
