"""The rules as the engine reads them: plain frozen data, checked and complete; depends only on ``measure``."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import date
from typing import Literal

from pydantic import BaseModel

from sercheck.measure import Stays

Length = str | int
"""A stretch: a length in time such as ``14D`` or ``6h`` (text), or a number of steps (int)."""

Action = Literal["hold", "note"]

RiskFrom = Literal["rule", "file", "budget", "default", "exact"]


@dataclass(frozen=True)
class Transform:
    """One step of ``after``.

    ``kind`` is difference, log, detrended, without_season, ranks or every. ``by`` is the distance of a difference (int
    steps or a season's name; None is 1), the season of ``without_season`` or the length of ``every``; ``take`` is sum,
    mean, max or count for ``every``.
    """

    kind: Literal["difference", "log", "detrended", "without_season", "ranks", "every"]
    by: Length | None = None
    take: Literal["sum", "mean", "max", "count"] | None = None

    def __str__(self) -> str:
        if self.kind == "every":
            return f"every {self.by}, {self.take}"
        if self.kind == "without_season":
            return f"without_season {self.by}"
        return self.kind if self.by is None else f"{self.kind} {self.by}"


@dataclass(frozen=True)
class Rule:
    """One rule of the file, with the file's defaults filled in.

    Attributes:
        name: unique in the file.
        measure: name of the measure.
        fields: the measure's own fields, validated.
        stays: what the rule bounds.
        columns: value columns that it judges (empty for a measure of the clock).
        only: globs of series keys; empty means all series.
        after: transforms in order.
        window: ``batch`` or a length.
        false_alarm: risk of one batch over all series and lags of the rule.
        across: how the risk is shared: any of batch, discoveries, together, series.
        matters: the smallest change worth knowing, or None.
        otherwise: what a failure does.
        when_undecided: release or hold.
        weight: what the rule weighs in the alarm budget (0 for one that takes no share).
        risk_from: where ``false_alarm`` comes from: the rule itself, the file's ``false_alarm``, the file's
            ``false_holds``, the default, or exact (no sampling error: the risk is 0).
        line: line of the rule in its file, from 1.
    """

    name: str
    measure: str
    fields: BaseModel
    stays: Stays
    columns: tuple[str, ...]
    only: tuple[str, ...] = ()
    after: tuple[Transform, ...] = ()
    window: Length = "batch"
    false_alarm: float = 0.001
    across: tuple[str, ...] = ("batch",)
    matters: float | None = None
    otherwise: Action = "hold"
    when_undecided: Literal["release", "hold"] = "release"
    tell: tuple[str, ...] = ()
    runbook: str | None = None
    about: str | None = None
    weight: float = 1.0
    risk_from: RiskFrom = "default"
    line: int = 0


@dataclass(frozen=True)
class FalseHolds:
    """The alarm budget: ``count`` false holds in ``per`` (a length in time)."""

    count: float
    per: str


@dataclass(frozen=True)
class Rulebook:
    """A whole rule file.

    Attributes:
        every: a pandas offset or ``irregular``.
        seasons: name to length (time or steps).
        batch_every: a length in time, or a pandas offset such as B or MS.
        closed_days: local dates.
        history: paths or globs named in the file (relative ones resolved against the file's folder), or
            ``db:NAME?table=...`` and ``db:NAME?query=...`` (percent-encoded).
        baseline: ``from`` (a length in time or an ISO date) and ``refresh`` (a length in time).
        limits: ``memory`` (bytes) and ``time`` (seconds).
        fingerprint: sha256 of the canonical content (comments, order of keys and layout do not change it).
        path: where it was read from, for messages.
        text: the YAML it was compiled from.
    """

    feed: str
    time: str
    series: tuple[str, ...]
    values: tuple[str, ...]
    every: str
    rules: tuple[Rule, ...]
    about: str | None = None
    timezone: str = "UTC"
    season_clock: str | None = None
    closed_days: tuple[date, ...] = ()
    seasons: Mapping[str, Length] = field(default_factory=dict)
    batch_every: str | None = None
    false_holds: FalseHolds | None = None
    tell: tuple[str, ...] = ()
    history: tuple[str, ...] = ()
    baseline: Mapping[str, str] = field(default_factory=dict)
    limits: Mapping[str, float] = field(default_factory=dict)
    fingerprint: str = ""
    path: str = ""
    text: str = ""
