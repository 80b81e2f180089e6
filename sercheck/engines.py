"""Which engine looks at the blocks of a batch: this process, or workers; depends on ``blocks`` and ``scale``."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager

from sercheck.blocks import Here, Workers
from sercheck.errors import UsageError

ENGINES = ("local", "dask")


@contextmanager
def workers_of(engine: str, scheduler: str | None) -> Iterator[Workers]:
    """The workers of an engine, for as long as the context lasts.

    Raises:
        UsageError: no such engine, or a scheduler for the local one.
        EngineError: workers cannot be started or reached.
    """
    if engine not in ENGINES:
        raise UsageError("--engine", f"'{engine}' is no engine", " or ".join(ENGINES))
    if engine == "local":
        if scheduler is not None:
            raise UsageError("--scheduler", "the local engine has no scheduler", "--engine dask beside it")
        yield Here()
        return
    from sercheck.scale import cluster

    with cluster(scheduler) as workers:
        yield workers
