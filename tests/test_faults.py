"""The catalogue of faults: pure, seeded, and doing what they say."""

from __future__ import annotations

from importlib import metadata

import numpy as np
import pytest

from sercheck import causes
from sercheck.errors import UsageError
from sercheck.rehearsal import faults
from sercheck.rehearsal.faults import Fault, catalogue

STEPS, N = 24, 24 * 30
FROM_ELSEWHERE = {
    "filled forward",
    "stuck",
    "cycle again",
    "batch again",
    "keys swapped",
    "interleaved",
    "clock slipped",
    "clock slipped in mid-window",
}
"""Faults that put values of history or of another series into the window."""

FAULTS = {fault.name: fault for fault in catalogue()}


def given(series=4, n=48, seed=0):
    """A window and the history before it, that nobody can write to."""
    rng = np.random.default_rng(seed)
    both = 20 + 5 * np.sin(2 * np.pi * np.arange(N + n) / STEPS) + rng.normal(size=(series, N + n))
    both.flags.writeable = False
    return both[:, N:], both[:, :N]


def broken(name, size=None, seed=1, **asked):
    """The window before and after the fault of that name."""
    window, history = given(**asked)
    fault = FAULTS[name]
    size = fault.sizes[0] if size is None else size
    return window, history, fault.apply(window, history, size, np.random.default_rng(seed), STEPS)


@pytest.mark.parametrize("name", FAULTS)
def test_a_fault_is_pure_and_seeded(name):
    """What comes in stays as it is, the same seed gives the same damage, and the shape is kept."""
    for size in FAULTS[name].sizes:
        window, _, out = broken(name, size)
        assert out.shape == window.shape
        assert not np.shares_memory(out, window)
        assert not np.array_equal(out, window, equal_nan=True)
        np.testing.assert_array_equal(out, broken(name, size)[2])


@pytest.mark.parametrize("name", FAULTS)
def test_missing_values_do_no_harm(name):
    """A window with gaps is broken without a warning, and a window of nothing but gaps stays one."""
    window, history = (part.copy() for part in given())
    window[0, ::5], window[1], history[2, -3:] = np.nan, np.nan, np.nan
    fault = FAULTS[name]
    out = fault.apply(window, history, fault.sizes[0], np.random.default_rng(0), STEPS)
    assert out.shape == window.shape
    if name not in FROM_ELSEWHERE:
        assert np.isnan(out[1]).all()


@pytest.mark.parametrize("name", FAULTS)
def test_a_fault_has_a_known_cause_and_a_sentence(name):
    """The rehearsal can tell whether the right cause was named, and the reader what was done."""
    fault = FAULTS[name]
    assert fault.cause in causes.CAUSES
    assert fault.says.endswith(".")
    assert fault.sizes


def test_order_and_repeats():
    """Shuffled, sorted and reversed keep the values; rows twice come in pairs; a stuck stretch is as long as asked."""
    for name in ("shuffled", "sorted", "reversed"):
        window, _, out = broken(name)
        np.testing.assert_array_equal(np.sort(out), np.sort(window))
    np.testing.assert_array_equal(broken("reversed")[2][:, ::-1], broken("reversed")[0])
    _, _, out = broken("rows twice")
    np.testing.assert_array_equal(out[:, ::2], out[:, 1::2])
    _, history, out = broken("stuck", 6)
    equal = np.diff(np.concatenate([history[:, -1:], out], axis=1)) == 0
    np.testing.assert_array_equal(equal.sum(axis=1), 6)
    _, _, out = broken("filled forward", 0.3, n=4800)
    assert np.mean(np.diff(out) == 0) == pytest.approx(0.3, abs=0.02)


def test_sums_and_differences_undo_each_other():
    """A running total differenced is the window, and differences summed up from history's last value are too."""
    window, _, out = broken("running total")
    np.testing.assert_allclose(np.diff(out, prepend=0.0), window)
    window, history, out = broken("differenced")
    np.testing.assert_allclose(history[:, -1:] + np.cumsum(out, axis=1), window)
    window, history, out = broken("differenced twice")
    first = history[:, -1:] - history[:, -2:-1] + np.cumsum(out, axis=1)
    np.testing.assert_allclose(history[:, -1:] + np.cumsum(first, axis=1), window)


def test_values_are_changed_as_told():
    """Units, signs, levels and smoothing are what their names say."""
    window, history, out = broken("unit changed in mid-window", 1000.0)
    np.testing.assert_allclose(out / window, np.repeat([[1.0, 1000.0]], 24, axis=1).repeat(4, axis=0))
    np.testing.assert_array_equal(broken("sign turned")[2], -window)
    np.testing.assert_allclose(broken("mirrored")[2] + window, 2 * np.repeat(window.mean(axis=1)[:, None], 48, axis=1))
    np.testing.assert_allclose((broken("level shifted")[2] - window)[:, 0], history.std(axis=1))
    np.testing.assert_allclose(broken("smoothed")[2][:, 1:-1], (window[:, :-2] + window[:, 1:-1] + window[:, 2:]) / 3)
    out = broken("interpolated")[2]
    np.testing.assert_allclose(out[:, 1:-1:2], (out[:, :-2:2] + out[:, 2::2]) / 2)
    mean = window[:, :24].mean(axis=1, keepdims=True)
    np.testing.assert_allclose(broken("spread evenly", 1.0)[2][:, :24], np.repeat(mean, 24, axis=1))


def test_clock_and_deliveries():
    """A slipped clock shows the row before, a replay shows an earlier delivery, swapped keys each other's rows."""
    window, history, out = broken("clock slipped")
    np.testing.assert_array_equal(out[:, 1:], window[:, :-1])
    np.testing.assert_array_equal(out[:, 0], history[:, -1])
    window, history, out = broken("cycle again")
    np.testing.assert_array_equal(out[:, 24:], window[:, :24])
    np.testing.assert_array_equal(broken("batch again", 2.0)[2], history[:, -96:-48])
    window, _, out = broken("keys swapped", 2.0)
    assert sorted(map(tuple, out)) == sorted(map(tuple, window))
    assert (out != window).any(axis=1).all()


def test_a_season_at_part_of_its_strength():
    """What is left of a sine of amplitude 5 is the part that was asked for."""
    for size in (0.0, 0.5):
        window, _, out = broken("season flattened", size, n=24 * 40)
        wave = np.sin(2 * np.pi * np.arange(window.shape[1]) / STEPS)
        np.testing.assert_allclose(2 * (out @ wave) / window.shape[1], 5 * size, atol=0.3)


def test_what_a_fault_needs():
    """Swapping needs two series, a replay its history, and the season is the one that history teaches."""
    assert not FAULTS["keys swapped"].fits(1, 24, N, STEPS)
    assert FAULTS["keys swapped"].fits(2, 24, 0, STEPS)
    assert not FAULTS["batch again"].fits(1, 24, 23, STEPS)
    lengths = {"day": 24, "week": 168}
    assert FAULTS["season gone"].steps(lengths, 4 * 168) == 168
    assert FAULTS["season gone"].steps(lengths, 4 * 168 - 1) == 24
    assert FAULTS["cycle again"].steps(lengths, 4 * 168) == 24
    assert FAULTS["cycle again"].steps({}, 1000) == 1


def test_another_package_adds_faults(monkeypatch):
    """An announced fault stands in the catalogue; one that is none, or has a name twice, is refused."""
    own = Fault("halves", "Half of each value.", causes.UNIT, (1.0,), lambda given: given.window / 2)
    monkeypatch.setattr(faults, "halves", own, raising=False)
    monkeypatch.setattr(faults, "number", 3, raising=False)
    found = []

    def points(group):
        assert group == "sercheck.faults"
        return [metadata.EntryPoint("x", f"sercheck.rehearsal.faults:{name}", group) for name in found]

    monkeypatch.setattr(metadata, "entry_points", points)
    found[:] = ["halves"]
    assert catalogue()[-1] is own
    found[:] = ["halves", "halves"]
    with pytest.raises(UsageError, match="has the name of another fault"):
        catalogue()
    found[:] = ["number"]
    with pytest.raises(UsageError, match="is int"):
        catalogue()
    found[:] = ["nothing"]
    with pytest.raises(UsageError, match="cannot be loaded"):
        catalogue()
