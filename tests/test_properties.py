from __future__ import annotations

import csv
import json
import tempfile
from dataclasses import replace
from functools import cache
from pathlib import Path

import numpy as np
import pandas as pd
import yaml
from gate_runs import NOW, RULES, water
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from record_samples import alike, records

import sercheck
from sercheck.grid import Axis, Panel
from sercheck.intake.layout import Layout
from sercheck.intake.stream import open_feed
from sercheck.record import Records
from sercheck.rulebook.compiled import Transform
from sercheck.transforms import apply

FEW = settings(max_examples=12, deadline=None, suppress_health_check=list(HealthCheck))
MORE = settings(max_examples=40, deadline=None, suppress_health_check=list(HealthCheck))
LAYOUT = Layout("at", ("key",), ("x",), "1h")
FIRST = pd.Timestamp("2026-03-10", tz="UTC")

cells = st.one_of(st.none(), st.floats(allow_nan=False, allow_infinity=False, width=64), st.integers(-(10**6), 10**6))
keys = st.text(st.characters(codec="utf-8", exclude_characters="\r\n\x00", exclude_categories=("Cs",)), min_size=1,
               max_size=6).filter(lambda key: key == key.strip())  # fmt: skip
feeds = st.lists(st.tuples(st.integers(0, 200), keys, cells), min_size=1, max_size=30)


def frame(rows: list[tuple[int, str, float | None]]) -> pd.DataFrame:
    """Rows of a feed."""
    stamps = [(FIRST + pd.Timedelta(hours=hour)).strftime("%Y-%m-%dT%H:%M:%SZ") for hour, _, _ in rows]
    return pd.DataFrame({"at": stamps, "key": [f"k{key}" for _, key, _ in rows],
                         "x": pd.Series([x for _, _, x in rows], dtype="float64")})  # fmt: skip


@MORE
@given(feeds, st.integers(0, 3), st.randoms(use_true_random=False))
def test_any_format_order_and_splitting_into_files_is_the_same_feed(rows, parts, random):
    """CSV, JSON lines and Parquet, whole or in parts, in any order: one fingerprint, one number of rows."""
    table = frame(rows)
    wanted = open_feed(table, LAYOUT).fingerprint
    mixed = table.sample(frac=1, random_state=random.randrange(1 << 30))
    assert open_feed(mixed, LAYOUT).fingerprint == wanted
    with tempfile.TemporaryDirectory() as folder:
        at = Path(folder)
        table.to_csv(at / "a.csv", index=False)
        table.to_parquet(at / "a.parquet")
        table.to_json(at / "a.jsonl", orient="records", lines=True, double_precision=15)
        assert open_feed(at / "a.csv", LAYOUT).fingerprint == wanted
        assert open_feed(at / "a.parquet", LAYOUT).fingerprint == wanted
        edges = sorted(random.randrange(len(table) + 1) for _ in range(parts))
        pieces = [mixed.iloc[low:high] for low, high in zip([0, *edges], [*edges, len(table)], strict=True)]
        for number, piece in enumerate(piece for piece in pieces if len(piece)):
            piece.to_csv(at / f"part{number}.csv", index=False)
        assert open_feed(str(at / "part*.csv"), LAYOUT).fingerprint == wanted


@cache
def usual(days: int = 40) -> tuple[pd.DataFrame, pd.DataFrame, pd.DataFrame]:
    """History, batch and the records of the batch."""
    history, batch = water(FIRST - pd.Timedelta(days=days), days, seed=1), water(FIRST, 1, seed=2)
    return history, batch, judged(batch, history)


def judged(batch: object, history: object, rules: str = RULES) -> pd.DataFrame:
    """The records."""
    return sercheck.gate(rules, batch, history, as_of=NOW).records


@FEW
@given(st.integers(0, 1 << 30), st.integers(1, 4))
def test_any_order_of_rows_and_files_gives_the_same_records(seed, parts):
    """Rows in any order, in any number of files, in any order of the files: every record to the last bit."""
    history, batch, wanted = usual()
    mixed = batch.sample(frac=1, random_state=seed)
    rng = np.random.default_rng(seed)
    with tempfile.TemporaryDirectory() as folder:
        pieces = np.array_split(np.arange(len(mixed)), parts)
        names = [str(Path(folder) / f"{number}.csv") for number in range(parts)]
        for name, piece in zip(names, pieces, strict=True):
            mixed.iloc[piece].to_csv(name, index=False)
        found = judged([names[place] for place in rng.permutation(parts)], history.sample(frac=1, random_state=seed))
    pd.testing.assert_frame_equal(found, wanted)


@FEW
@given(st.sampled_from([0.125, 0.5, 2.0, 8.0, 3.6, 1 / 3.6]), st.sampled_from([0.0, 64.0, -4096.0]),
       st.sampled_from([40, 70]))  # fmt: skip
def test_another_unit_changes_no_p_value(scale, shift, days):
    """Readings in another unit: the same outcomes and p-values, to the last bit where the unit is a power of two.

    Else to the rounding of the readings; against a stationary history and against the recent past.
    """
    history, batch, wanted = usual(days)

    def other(rows: pd.DataFrame) -> pd.DataFrame:
        return rows.assign(cm=rows["cm"] * scale + shift)

    found = judged(other(batch), other(history))
    assert found["outcome"].tolist() == wanted["outcome"].tolist()
    assert found["n"].tolist() == wanted["n"].tolist()
    exact = shift == 0 and np.log2(scale).is_integer()
    np.testing.assert_allclose(
        found["p_value"].astype(float), wanted["p_value"].astype(float), rtol=0 if exact else 1e-9, atol=0,
        equal_nan=True,
    )  # fmt: skip


def panel(values: np.ndarray) -> Panel:
    """A panel of hours, the last 24 of them the batch."""
    place = np.arange(values.shape[1])
    due = np.ones(len(place), dtype=bool)
    axis = Axis(place * 3_600_000_000_000, place, {"day": 24}, {"day": place % 24}, ~due, due)
    return Panel(values, len(place) - 24, axis, np.isfinite(values))


@MORE
@given(st.integers(1, 6), st.integers(0, 1 << 30), st.floats(0, 0.4))
def test_differences_are_exact_and_close_no_gap(lag, seed, missing):
    """A difference is the value less the one before it in time; what is missing stays missing; the input stays."""
    rng = np.random.default_rng(seed)
    values = np.round(rng.normal(size=(2, 72)), 3)
    values[rng.random(values.shape) < missing] = np.nan
    before = values.copy()
    found = apply((Transform("difference", lag),), panel(values))
    np.testing.assert_array_equal(values, before)
    np.testing.assert_array_equal(found.values, values[:, lag:] - values[:, :-lag])
    assert found.start == 72 - 24 - lag


@MORE
@given(st.integers(0, 1 << 30), st.floats(0, 0.3), st.sampled_from(["detrended", "without_season", "ranks"]),
       st.integers(-3, 3).map(lambda power: 2.0**power), st.sampled_from([0.0, 128.0]))  # fmt: skip
def test_transforms_follow_the_unit(seed, missing, kind, scale, shift):
    """Scaled and shifted readings give scaled residuals, and the same ranks."""
    rng = np.random.default_rng(seed)
    values = rng.normal(size=(2, 240)).round(3)
    values[rng.random(values.shape) < missing] = np.nan
    chain = (Transform(kind, "day" if kind == "without_season" else None),)
    one, other = apply(chain, panel(values)).values, apply(chain, panel(values * scale + shift)).values
    np.testing.assert_allclose(other, one if kind == "ranks" else one * scale, atol=1e-9 * scale, rtol=1e-9)


names = st.text("abcdefgh ", min_size=1, max_size=8).map(str.strip).filter(bool)
numbers = st.floats(-1e6, 1e6, allow_nan=False).map(lambda x: round(x, 3))
stays = st.one_of(
    st.fixed_dictionaries({"below": numbers}), st.fixed_dictionaries({"above": numbers}),
    st.just({"like": "history"}),
    st.tuples(numbers, numbers).filter(lambda pair: pair[0] < pair[1]).map(lambda pair: {"between": list(pair)}),
)  # fmt: skip
rules = st.lists(
    st.fixed_dictionaries(
        {"name": names, "measure": st.sampled_from(["level", "trend"]), "stays": stays},
        optional={"otherwise": st.sampled_from(["hold", "note"]), "weight": st.integers(1, 90).map(lambda x: x / 10),
                  "window": st.sampled_from(["batch", "3D", 48]), "about": names},
    ),
    min_size=1, max_size=4, unique_by=lambda rule: rule["name"],
)  # fmt: skip


class Plain(yaml.SafeDumper):
    """Writes every value out: rule files have no references."""

    def ignore_aliases(self, data: object) -> bool:
        return True


def dumped(data: object, **how: object) -> str:
    """YAML text."""
    return str(yaml.dump(data, Dumper=Plain, sort_keys=False, **how))


@MORE
@given(rules, st.randoms(use_true_random=False))
def test_a_rule_file_means_the_same_however_it_is_written(given_rules, random):
    """Flow or block style, keys in any order, with comments: one fingerprint; another rule: another one."""
    whole = {"feed": "f", "columns": {"time": "at", "values": ["x"]}, "every": "1h", "batch_every": "1D",
             "false_holds": "1 per 90D", "rules": given_rules}  # fmt: skip
    text = dumped(whole)
    book = sercheck.load_rules(text)
    items = list(whole.items())
    random.shuffle(items)
    flow = "# a comment\n" + dumped(dict(items), default_flow_style=random.random() < 0.5, width=60)
    again = sercheck.load_rules(flow)
    assert again.fingerprint == book.fingerprint
    assert [replace(rule, line=0) for rule in again.rules] == [replace(rule, line=0) for rule in book.rules]
    changed = [{**given_rules[0], "name": given_rules[0]["name"] + "x"}, *given_rules[1:]]
    if len({rule["name"] for rule in changed}) == len(changed):
        assert sercheck.load_rules(dumped({**whole, "rules": changed})).fingerprint != book.fingerprint


texts = st.text(st.characters(exclude_categories=("Cs",), exclude_characters="\x00"), max_size=12)


@MORE
@given(st.lists(texts, min_size=1, max_size=6), st.data())
def test_records_come_back_from_every_format(series, data):
    """Whatever names and numbers they hold, records written as CSV, JSON lines or Parquet are what they were."""
    import pyarrow.parquet

    n = len(series)
    numbers = data.draw(st.lists(st.one_of(st.none(), st.floats(allow_nan=False, allow_infinity=False)), min_size=n,
                                 max_size=n))  # fmt: skip
    table = records(n, series=series, observed=numbers, record_id=[f"{place:032x}" for place in range(n)])
    with tempfile.TemporaryDirectory() as folder:
        at = Path(folder)
        for suffix in ("jsonl", "parquet", "csv"):
            table.write(str(at / f"r.{suffix}"))
        with (at / "r.csv").open(encoding="utf-8", newline="") as lines:
            found = list(csv.DictReader(lines))
        assert [row["series"] for row in found] == series
        assert [float(row["observed"]) if row["observed"] else None for row in found] == numbers
        lines = [json.loads(line) for line in (at / "r.jsonl").read_bytes().decode().split("\n")[:-1]]
        assert lines == list(table.rows())
        back = pyarrow.parquet.read_table(at / "r.parquet").to_pydict()
        assert alike(Records(back), table)
    assert len(table) == n
