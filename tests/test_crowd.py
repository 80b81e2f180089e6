from __future__ import annotations

import pytest

from tests.crowd import crowd


@pytest.mark.parametrize("feeds", [1, 10])
def test_twenty_gates_at_once(ledger_store, tmp_path, feeds):
    """On one feed and on ten, each batch judged by two: one decision for each, whole records, no lock."""
    url = ledger_store if "://" in ledger_store else None
    told = crowd(tmp_path / "store", url, feeds, batches=10, at_once=20)
    assert told["gates"] == 20


@pytest.mark.scale
@pytest.mark.parametrize("feeds", [1, 20])
def test_a_thousand_gates(ledger_store, tmp_path, feeds):
    """The same for longer, and on twenty feeds."""
    url = ledger_store if "://" in ledger_store else None
    assert crowd(tmp_path / "store", url, feeds, batches=500, at_once=20)["gates"] == 1000
