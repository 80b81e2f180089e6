from __future__ import annotations

import pytest

from tests.killed import SCENES, Scene, harness
from tests.servers import new_database


@pytest.fixture(params=["sqlite", "postgresql"])
def new_url(request):
    """What makes an empty database, or a copy of one; None for ledgers in a file."""
    if request.param == "sqlite":
        return None
    server = request.getfixturevalue("running_server")
    return lambda like=None: new_database(server, like)


def scenes(*names: str) -> list[Scene]:
    """Scenes by name."""
    return [scene for scene in SCENES if scene.name in names]


def test_killed_where_it_writes_and_repeated(tmp_path, new_url):
    """Killed before some of its writes and at some moment, the same command ends as if never killed."""
    which = ("released", "settled") if new_url is None else ("released",)
    figures = harness(tmp_path, 4, 20260310, new_url, scenes(*which))
    assert figures.runs == 4
    assert figures.killed >= 3


def test_killed_where_it_writes_to_a_url(tmp_path):
    """The same with the archive at a URL whose objects are written half and half."""
    figures = harness(tmp_path, 3, 20260311, None, scenes("released"), at_url=True)
    assert figures.killed == 3
    assert {name.split(": ")[1].split()[0] for name in figures.boundaries} & {"half", "create", "rename"}


@pytest.mark.scale
def test_killed_two_hundred_times(tmp_path, new_url):
    """The same for every scene: learning, a new store, released, held with a page and a desk, settled."""
    figures = harness(tmp_path, 200, 1, new_url)
    assert figures.killed >= 150
    assert len({name.partition(":")[0] for name in figures.boundaries}) == len(SCENES)
