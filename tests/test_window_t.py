"""A batch's statistic against history's windows."""

import numpy as np
from naive.scores import window_t as slow_window_t

from sercheck.serial.risk import t_tail
from sercheck.serial.window_t import count_windows, fewest_windows, window_t, windows


def test_twin():
    """All series at once give what one series at a time gives, windows without a value left out."""
    seeded = np.random.default_rng(3)
    history, now = seeded.normal(size=(20, 12)), seeded.normal(size=20)
    history[seeded.random(history.shape) < 0.2] = np.nan
    centre, scale, df = window_t(history, now)
    for s in range(20):
        t, freedom = slow_window_t(history[s], now[s])
        np.testing.assert_allclose([(now[s] - centre[s]) / scale[s], df[s]], [t, freedom])


def test_lags_beside_each_other():
    """A third axis of lags is kept apart."""
    seeded = np.random.default_rng(4)
    history, now = seeded.normal(size=(3, 9, 2)), seeded.normal(size=(3, 2))
    both = window_t(history, now)
    for lag in range(2):
        for whole, one in zip(both, window_t(history[:, :, lag], now[:, lag]), strict=True):
            np.testing.assert_allclose(whole[:, lag], one, rtol=1e-12, atol=1e-15)


def test_nothing_to_compare():
    """Fewer than two windows, or no statistic in the batch, give NaN and no warning."""
    history = np.array([[1.0, np.nan, np.nan], [np.nan] * 3, [1.0, 2.0, 3.0]])
    result = window_t(history, np.array([1.0, 1.0, np.nan]))
    assert np.isnan(np.stack(result)).all()
    np.testing.assert_array_equal(count_windows(history), [1, 0, 3])


def test_windows_touch_the_batch():
    """Stretches are counted back from the end and what is left over at the beginning is dropped."""
    cut = windows(np.arange(11.0)[None, :], 4)
    np.testing.assert_array_equal(cut, [[[3, 4, 5, 6], [7, 8, 9, 10]]])
    assert windows(np.ones((2, 3)), 4).shape == (2, 0, 4)


def test_exact_size():
    """For independent normal statistics the false-alarm rate is the nominal one."""
    seeded = np.random.default_rng(5)
    values = seeded.normal(size=(40_000, 9))
    centre, scale, df = window_t(values[:, :8], values[:, 8])
    p = t_tail((values[:, 8] - centre) / scale, df)
    for risk in (0.05, 0.01, 0.001):
        assert abs((p <= risk).mean() - risk) < 4 * np.sqrt(risk / 40_000)


def test_more_windows_at_small_risk():
    """Eight windows serve until .001, twenty are asked from there on."""
    assert (fewest_windows(0.01), fewest_windows(0.001)) == (8, 20)
