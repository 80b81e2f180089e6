from __future__ import annotations

import pytest

from tests.fuzz import CASES, TARGETS, seeds


@pytest.mark.parametrize("what", TARGETS)
def test_what_once_crashed_is_answered(what):
    """What a fuzzer begins with, and every input it once broke the program with, is read or refused in one sentence."""
    assert len(seeds(what)) >= 5 + len(list((CASES / what).glob("*")))
    for data in seeds(what):
        TARGETS[what](data)
