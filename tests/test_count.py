"""Rows per period."""

import dataclasses

import numpy as np
import pytest
from panels import clock_of
from processes import LIKE, p_values, panel

from sercheck.measure import Question, Stays
from sercheck.measures.count import Count


def look(delivered, start, stays=LIKE, per="1D", risk=0.01, lengths=None):
    """Count an hourly panel's delivered rows."""
    told = panel(np.where(delivered, 1.0, np.nan), start, lengths)
    question = Question(Count.Fields(per=per), stays, risk, lengths or {}, clock_of(told))
    return Count().run(told, question)


def holes(seed, series, days, share=0.2):
    """Hours delivered with bursts of gaps: a day loses more or fewer."""
    seeded = np.random.default_rng(seed)
    lost = np.repeat(seeded.gamma(2.0, share / 2, size=(series, days)), 24, axis=1)
    return seeded.random(lost.shape) > lost


def test_rows_of_a_day():
    """The observed count is the rows of the day, and of several days their level."""
    delivered = holes(1, 3, 31)
    seen = look(delivered, 720)
    np.testing.assert_allclose(seen.observed[:, 0], delivered[:, 720:].sum(axis=1), rtol=1e-9)


def test_false_alarms():
    """Healthy days are held about as often as asked, though their counts scatter more than Poisson's."""
    p = p_values(look(holes(2, 3000, 31), 720))
    assert (p <= 0.01).mean() <= 0.022
    p = p_values(look(holes(3, 1000, 24 * 9), 24 * 24 * 8))
    assert (p <= 0.01).mean() <= 0.022


def test_half_a_day_is_missing():
    """A day with half of its rows is found against three months of days that lose a twentieth of theirs."""
    delivered = holes(4, 50, 91, share=0.05)
    delivered[:, 2172:] = False
    assert (p_values(look(delivered, 2160)) < 0.01).mean() > 0.9


@pytest.mark.parametrize("stays", [Stays("above", low=20.0), Stays("between", 10.0, 22.0), LIKE])
def test_limit_and_p_value_agree(stays):
    """The observation is beyond the limit exactly when the p-value is within the risk."""
    seen = look(holes(5, 200, 31), 720, stays)
    for side, law in (("upper", seen.upper), ("lower", seen.lower)):
        if law is not None:
            limit = law.limit(side, np.full((200, 1), 0.05))
            beyond = seen.observed >= limit if side == "upper" else seen.observed <= limit
            np.testing.assert_array_equal(law.p_value(side) <= 0.05, beyond)


def test_a_number_on_complete_rows():
    """Where every day of history has all of its rows, a number is compared as it is."""
    delivered = np.ones((2, 744), dtype=bool)
    delivered[1, 730:740] = False
    seen = look(delivered, 720, Stays("above", low=20.0))
    np.testing.assert_allclose(p_values(seen), [1.0, 0.0], atol=1e-9)
    assert "completeness" in look(delivered, 720).reasons[0]


def test_weekly_cycle_is_taken_out():
    """Quiet weekends are not held when the week is a season of the feed."""
    delivered = holes(6, 100, 7 * 20, share=0.05)
    hour = np.arange(delivered.shape[1])
    delivered &= ~((hour // 24 % 7 >= 5) & (hour % 24 >= 12))
    weekend = look(delivered[:, : 24 * 139], 24 * 138, lengths={"week": 168})
    assert (p_values(weekend) <= 0.01).mean() <= 0.05


def test_reasons():
    """An odd period, a window shorter than it, an irregular feed and too short a history are told."""
    delivered = holes(7, 2, 31)
    assert "whole number of steps" in look(delivered, 720, per="90min").reasons[0]
    assert "no whole period" in look(delivered, 730).reasons[0]
    assert "fewer than 8 stretches" in look(delivered, 24 * 4, per="1D").reasons[0]
    assert "no history" in look(delivered[:, :24], 0).reasons[0]
    told = panel(np.ones((1, 100)), 50)
    clock = clock_of(told)
    clock = dataclasses.replace(clock, grid=dataclasses.replace(clock.grid, irregular=True))
    seen = Count().run(told, Question(Count.Fields(per="1D"), LIKE, 0.01, {}, clock))
    assert "irregular" in seen.reasons[0]


@pytest.mark.parametrize("per", ["1 fortnight", "0D", "", 0])
def test_bad_period(per):
    """A period that is no length is refused with what was wanted."""
    with pytest.raises(ValueError, match="a period is"):
        Count.Fields(per=per)
