"""The small benchmark: what a judgement costs beside reading and beside a loop does not double unseen."""

import json
from dataclasses import replace

import pytest

from tests import bench


@pytest.fixture(scope="module")
def baseline():
    """The stored ratios."""
    return json.loads(bench.BASELINE.read_text())["ratios"]


@pytest.fixture(scope="module")
def told(baseline, tmp_path_factory):
    """A small run; rows that look worse are measured once more, for the machine may have been busy with others."""
    first = bench.measure(small=True, folder=tmp_path_factory.mktemp("bench"), profiles=False)
    doubtful = tuple(bench.losses(first, baseline))
    if not doubtful:
        return first
    again = bench.measure(small=True, names=doubtful, folder=tmp_path_factory.mktemp("again"), profiles=False)
    return first | again


def test_no_ratio_is_twice_as_bad_as_it_was(told, baseline):
    """Against streaming, against the loop, across orders and gaps, in learning and starting: none lost twofold."""
    assert bench.losses(told, baseline) == {}


def test_every_row_of_a_small_run_is_held(told, baseline):
    """A row that is added is held to its ratio as well."""
    assert set(told) == set(baseline)


def test_the_guard_fails_on_a_twofold_loss(told, baseline):
    """A ratio that doubles, or halves where more is better, is named."""
    worse = {
        name: replace(one, ratio=baseline[name] / 2.1 if bench.ROWS[name].least else baseline[name] * 2.1)
        for name, one in told.items()
    }
    assert set(bench.losses(worse, baseline)) == set(baseline)


def test_the_table_tells_what_misses(told):
    """Each row stands in the table, and one that misses says so and where its time goes."""
    slow = replace(told["wide"], ratio=99.0, profile=("40%  some.py:where",))
    text = bench.table(told | {"wide": slow})
    assert all(bench.ROWS[name].name in text for name in told)
    assert "| 99 | ≤ 3 | **misses**" in text
    assert "    40%  some.py:where" in text
