"""Blocks of series looked at by the workers of a Dask cluster: the same records, to the bit, as from one process.

The only room that knows Dask, which it imports when it is asked for. The blocks are those of the local engine and are
put together in its order; what is decided is decided once, by the process that asked, over what all workers measured.
A task is a pure function of a piece of a file (or of rows sent along), so what a lost worker had is done again.
Depends on ``blocks``, ``shuffle`` and ``intake``.
"""

from __future__ import annotations

import os
import sys
import warnings
from collections import deque
from collections.abc import Iterable, Iterator, Sequence
from contextlib import contextmanager, suppress
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np

from sercheck import __version__, limits, stopwatch
from sercheck.blocks import Looked, look
from sercheck.engine import Run
from sercheck.errors import EngineError
from sercheck.grid import Grid
from sercheck.history import Past
from sercheck.intake import sorted_parquet, stream
from sercheck.intake.assemble import height_of, planned_grids
from sercheck.intake.calendar import Cadence
from sercheck.intake.databases import DatabaseRows, is_source
from sercheck.intake.layout import Layout
from sercheck.intake.pairs import aligned
from sercheck.intake.paths import expand, kind_of
from sercheck.intake.rows import Fingerprint, Rows
from sercheck.intake.stretch import Plan, plan
from sercheck.learn import Learned, of_block
from sercheck.rulebook.compiled import Rulebook
from sercheck.shuffle import Shuffled, mixed_up, row_groups, side_by_side

if TYPE_CHECKING:
    from pathlib import Path

    from sercheck.intake.stream import Given, Piece, Source
    from sercheck.stopwatch import Timing

AHEAD = 3
"""Tasks on their way for each thread of the cluster (ours: none waits, and few blocks are held by the client)."""
NOBODY = "127.0.0.1:0"
"""Where Dask's own pages are served: on a free port, for this machine only (several runs may go on at once)."""
PATIENCE = 30
"""Seconds to wait for a scheduler (Dask's own default, from memory)."""


MEMORY = {"MALLOC_TRIM_THRESHOLD_": 64 << 20, "MALLOC_MMAP_THRESHOLD_": 32 << 20}
"""What glibc comes to by itself where arrays of some MB come and go. Dask tells its workers to give every array's
memory back to the system at once, which costs more than what is computed in it."""


@dataclass(frozen=True)
class Common:
    """What all tasks of a run need; it is sent once.

    Attributes:
        past: the history of the batch, without its rows.
        run: what is the same for all blocks.
        laid: the axis of all blocks, or None where whole grids are sent.
        batch: the batch's rows, where history is read by the workers.
        timed: seconds are asked for.
    """

    past: Past
    run: Run
    laid: Plan | None = None
    batch: Rows | None = None
    timed: bool = False


@dataclass(frozen=True)
class Done:
    """What comes back from a task.

    Attributes:
        looked: what was kept of its blocks, or what they teach.
        mixed: fingerprint of the rows that it read.
        known: places of the batch's series that its history has.
        timings: what its stages took.
    """

    looked: list[Any]
    mixed: Fingerprint | None = None
    known: np.ndarray | None = None
    timings: tuple[Timing, ...] = ()


def of_grid(common: Common, grid: Grid) -> Done:
    """Look at a block that was sent."""
    return _looked(common, [grid])


def of_piece(common: Common, piece: Piece) -> Done:
    """Read a piece of the batch and look at it."""
    assert common.laid is not None
    with stopwatch.timed(asked=common.timed):
        stopwatch.begin("read")
        rows = piece.rows()
        done = _looked(common, planned_grids(rows, None, common.laid))
        return replace(done, mixed=mixed_up(rows))


def of_history(common: Common, piece: Piece) -> Done:
    """Read a piece of history, put the batch's rows of the same series behind it and look at them."""
    assert common.laid is not None
    assert common.batch is not None
    with stopwatch.timed(asked=common.timed):
        stopwatch.begin("read")
        past = piece.rows()
        if not len(past):
            return Done([])
        known = stream.known(past.keys, common.batch.keys)
        done = _looked(common, planned_grids(aligned(common.batch, past.keys), past, common.laid))
        return replace(done, mixed=mixed_up(past), known=known)


def of_parts(common: Common, parts: Sequence[Rows], first: int, last: int) -> Done:
    """Look at some series of the parts of a shuffle."""
    assert common.laid is not None
    rows = side_by_side(parts).of_series(first, last)
    return _looked(common, planned_grids(rows, None, common.laid))


def _looked(common: Common, grids: Iterable[Grid]) -> Done:
    with stopwatch.timed(asked=common.timed):
        stopwatch.begin("read")
        looked = []
        for grid in grids:
            looked.append(look(grid, common.past, common.run))
            stopwatch.begin("read")
        return Done(looked, timings=stopwatch.timings())


@dataclass(frozen=True)
class Teaching:
    """What all tasks need that learn."""

    book: Rulebook
    cadence: Cadence
    laid: Plan | None = None
    batch: None = None


def lesson_of_grid(common: Teaching, grid: Grid) -> Done:
    """Learn from a block that was sent."""
    return Done([of_block(grid, common.book, common.cadence)])


def lesson_of_piece(common: Teaching, piece: Piece) -> Done:
    """Read a piece of history and learn from it."""
    assert common.laid is not None
    rows = piece.rows()
    if not len(rows):
        return Done([])
    grids = planned_grids(rows, None, common.laid)
    return Done([of_block(grid, common.book, common.cadence) for grid in grids], mixed_up(rows))


def same(what: Any) -> Any:
    """What came, kept by a worker; made again where that is lost."""
    return what


def version() -> str:
    """Version of this package on a worker."""
    return __version__


@contextmanager
def cluster(scheduler: str | None) -> Iterator[Cluster]:
    """A cluster for one judgement: the one at an address, else processes on this machine, one a core.

    Raises:
        EngineError: Dask is not installed, the scheduler does not answer, or its workers have another version.
    """
    place = "--engine dask"
    try:
        import distributed
    except ImportError as missing:
        todo = "pip install 'sercheck[dask]'"
        raise EngineError(place, f"{missing.name} is not installed", "the extra `dask`", todo) from missing
    dask: Any = distributed  # its functions have no types
    own = None
    try:
        if scheduler is None:
            own = local_cluster()
        client = dask.Client(own or scheduler, timeout=PATIENCE, set_as_default=False)
    except (OSError, ValueError, TypeError) as trouble:
        if own is not None:
            own.close()
        came, wanted = f"no scheduler answers ({' '.join(str(trouble).split())[:200]})", "one such as tcp://10.0.0.1:8786"
        raise EngineError(place if scheduler is None else f"{place} --scheduler {scheduler}", came, wanted) from trouble
    try:
        if own is None:
            _must_be_ours(client, scheduler)
        yield Cluster(client)
    finally:
        client.close()
        if own is not None:
            own.close()


def local_cluster(workers: int | None = None) -> Any:
    """Processes on this machine that work for one scheduler, one a core by default."""
    import dask
    import distributed

    cluster: Any = distributed.LocalCluster  # it has no types
    kept = {f"distributed.nanny.pre-spawn-environ.{name}": str(size) for name, size in MEMORY.items()}
    with dask.config.set(kept):
        return cluster(n_workers=workers or os.cpu_count(), threads_per_worker=1, dashboard_address=NOBODY)


def _must_be_ours(client: Any, scheduler: str | None) -> None:
    """Refuse workers that are not there, lack the package or have another version of it."""
    place, wanted = f"--engine dask --scheduler {scheduler}", f"sercheck {__version__} on every worker"
    try:
        found = set(client.run(version).values())
    except ImportError as missing:
        raise EngineError(place, f"its workers lack {missing.name}", wanted) from missing
    if not found:
        raise EngineError(place, "it has no workers", "one or more")
    if found != {__version__}:
        raise EngineError(place, f"its workers have {', '.join(sorted(found))}", wanted)


class Cluster:
    """The workers of a Dask cluster."""

    def __init__(self, client: Any) -> None:
        self._client = client
        self._ahead = AHEAD * max(1, sum(client.nthreads().values()))

    def submit(self, function: Any, *args: Any) -> Any:
        """Begin a call; futures among its arguments (also in lists) are waited for."""
        with warnings.catch_warnings():
            warnings.filterwarnings("ignore", "Sending large graph")  # rows that only this process can read
            return self._client.submit(function, *args, pure=False)

    def results(self, futures: Sequence[Any]) -> list[Any]:
        """Wait for calls.

        Raises:
            SercheckError: what a call raised; ``EngineError`` when workers die of it or the scheduler is gone.
        """
        from distributed import CancelledError, KilledWorker
        from distributed.comm.core import CommClosedError

        told = []
        for future in futures:
            try:
                while not future.done():
                    limits.check()
                    with suppress(TimeoutError):
                        future.result(timeout=1)
                told.append(future.result())
            except KilledWorker as killed:
                came = "a block of series was given to several workers and each of them died"
                raise EngineError("--engine dask", came, todo="Have they enough memory?") from killed
            except (CancelledError, CommClosedError) as gone:
                raise EngineError("--engine dask", "the scheduler is gone", "one that stays") from gone
        return told

    def open(self, given: Given, layout: Layout) -> Source:
        """As ``open_feed``; large Parquet whose series run through several files is put together by the workers."""
        cadence = Cadence(layout.every, layout.timezone)
        files = _parquet(given)
        if not files or not layout.series or cadence.irregular:
            return stream.open_feed(given, layout)
        paths = tuple(map(str, files))
        apart = stream.files_apart(files, layout, cadence)
        if apart is not None:
            return stream.StreamSource(apart, layout, paths)
        units = row_groups(files, layout, sorted_parquet.BLOCK_ROWS)
        if len(units) < 2 or sum(unit.rows for unit in units) <= sorted_parquet.BLOCK_ROWS:
            return stream.open_feed(given, layout)
        sys.stderr.write(
            f"sercheck: series run through several parts of {paths[0]}{' and others' if paths[1:] else ''}: the rows "
            "are sorted by series among the workers first; files with series of their own need no such step\n"
        )
        return Shuffled(self, units, layout, paths, sorted_parquet.BLOCK_ROWS)

    def learned(self, history: Source, layout: Layout, book: Rulebook, cadence: Cadence) -> Iterator[Learned]:
        """What all blocks of a history teach, in the order of the local engine."""
        common = Teaching(book, cadence)
        pieces = None if cadence.irregular else history.pieces()
        if pieces is None or not isinstance(history, stream.ReadForFingerprint):
            grids = stream.feed_grids(history, None, layout)
            yield from self._each(lesson_of_grid, common, ([grid] for grid in grids))
            return
        own = stream.feed_cadence(history, None, layout)
        common = replace(common, laid=plan(history.extent(own), None, own, layout, None))
        yield from self._pieces(lesson_of_piece, common, history, pieces)

    def looked(self, batch: Source, past: Past, layout: Layout, run: Run) -> Iterator[Looked]:
        """Look at all blocks of the batch beside its history, in the order of the local engine."""
        stopwatch.begin("wait for workers")
        told = replace(past, source=None, baseline=None, notes=())
        common = Common(told, run, timed=stopwatch.asked())
        cadence = stream.feed_cadence(batch, past.source, layout)
        if past.source is None and isinstance(batch, Shuffled):
            laid = plan(batch.extent(cadence), None, cadence, layout, None)
            yield from self._shuffled(batch, replace(common, laid=laid))
            return
        if isinstance(batch, Shuffled):
            batch = stream.MemorySource(batch.rows(), layout, batch.paths)
        feed = past.source or batch
        pieces = None if cadence.irregular else feed.pieces()
        if pieces is None or not isinstance(feed, stream.ReadForFingerprint):
            grids = stream.feed_grids(batch, past.source, layout)
            yield from self._each(of_grid, common, ([grid] for grid in grids))
        elif past.source is None:
            common = replace(common, laid=plan(batch.extent(cadence), None, cadence, layout, None))
            yield from self._pieces(of_piece, common, feed, pieces)
        else:
            rows, laid = stream.plan_beside(batch, past.source, cadence, layout)
            yield from self._pieces(of_history, replace(common, laid=laid, batch=rows), feed, pieces)

    def _pieces(
        self, function: Any, common: Common | Teaching, feed: stream.ReadForFingerprint, pieces: Sequence[Piece]
    ) -> Iterator[Any]:
        """Pieces of the batch, or of its history and then the series that only the batch knows."""
        mixed = Fingerprint(feed.layout.values)
        batch = common.batch
        left = np.ones(0 if batch is None else len(batch.keys), dtype=bool)
        for done in self._done(function, common, ([piece] for piece in pieces)):
            if done.mixed is not None:
                mixed.join(done.mixed)
            if done.known is not None:
                left[done.known] = False
            yield from done.looked
        feed.was_read(mixed)
        if batch is not None and left.any():
            assert common.laid is not None
            grids = planned_grids(aligned(batch, batch.keys[left]), None, common.laid)
            assert isinstance(common, Common)
            yield from self._each(of_grid, replace(common, batch=None), ([grid] for grid in grids))

    def _shuffled(self, batch: Shuffled, common: Common) -> Iterator[Looked]:
        """Blocks of neighbouring series, as the local engine has them."""
        assert common.laid is not None
        height, series = height_of(common.laid), len(batch.keys)
        blocks = (batch.of_series(low, min(low + height, series)) for low in range(0, series, height))
        yield from self._each(of_parts, common, blocks)

    def _each(self, function: Any, common: Common | Teaching, calls: Iterable[Sequence[Any]]) -> Iterator[Any]:
        for done in self._done(function, common, calls):
            yield from done.looked

    def _done(self, function: Any, common: Common | Teaching, calls: Iterable[Sequence[Any]]) -> Iterator[Done]:
        """What calls came to, in their order; few are on their way at a time."""
        sent = self.submit(same, common)
        waiting: deque[Any] = deque()
        for call in calls:
            waiting.append(self.submit(function, sent, *call))
            if len(waiting) > self._ahead:
                yield self._first(waiting)
        while waiting:
            yield self._first(waiting)

    def _first(self, waiting: deque[Any]) -> Done:
        limits.check()
        (done,) = self.results([waiting.popleft()])
        stopwatch.add(done.timings)
        assert isinstance(done, Done)
        return done


def _parquet(given: Given) -> list[Path] | None:
    """The files that are given where all of them are Parquet."""
    if isinstance(given, DatabaseRows) or not isinstance(given, str | os.PathLike | list | tuple):
        return None
    each = [given] if isinstance(given, str | os.PathLike) else list(given)
    if any(map(is_source, each)):
        return None
    files = expand(each)
    return files if all(kind_of(path)[0] == "parquet" for path in files) else None
