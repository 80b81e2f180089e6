"""Two methods in one block: each series keeps what its own method said."""

import numpy as np

from sercheck.measure import Measurement
from sercheck.measures._past import combined


def said(reasons, undecided, unsure=None):
    """A measurement of three series that says no more than its reasons."""
    ones = np.ones((3, 1), dtype=np.int64)
    places = lambda which: None if which is None else np.array(which)[:, None]
    return Measurement(
        ones * 1.0, ones, ones, ones * 1.0, None, None, places(undecided), reasons, "", "", unsure=places(unsure)
    )


def test_each_series_keeps_its_own_reasons():
    """Places in the second method's sentences move behind those of the first; a method without unsure passes has -1."""
    first = said(("a",), [0, -1, -1])
    second = said(("b", "c"), [-1, -1, 0], [-1, 1, -1])
    seen = combined(np.array([True, False, False]), lambda: first, lambda: second)
    assert seen.reasons == ("a", "b", "c")
    assert seen.undecided[:, 0].tolist() == [0, -1, 1]
    assert seen.unsure is not None
    assert seen.unsure[:, 0].tolist() == [-1, 2, -1]
    other = combined(np.array([False, True, True]), lambda: second, lambda: first)
    assert other.unsure is not None
    assert other.unsure[:, 0].tolist() == [-1, 1, -1]
    assert other.undecided[:, 0].tolist() == [2, -1, 0]
