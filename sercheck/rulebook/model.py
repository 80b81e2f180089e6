"""The keys of a rule file and of a rule; depends on pydantic and the values.

One description serves reading and the JSON Schema. References from one key to another (a column, a season, a
measure's own fields) are checked where the rules are compiled.
"""

from __future__ import annotations

from typing import Annotated, Any, Literal

from pydantic import BaseModel, ConfigDict, Field, WithJsonSchema

from sercheck.rulebook.values import (
    Baseline,
    Cadence,
    ClosedDays,
    Desks,
    FalseHolds,
    History,
    Limits,
    Period,
    Positive,
    Risk,
    Seasons,
    Text,
    Texts,
    Window,
    Word,
    Zone,
    chosen,
    one_or_list,
)

ACROSS = ("batch", "discoveries", "together", "series")
Across = Annotated[
    tuple[str, ...], chosen(ACROSS), WithJsonSchema(one_or_list({"type": "string", "enum": list(ACROSS)}))
]
Otherwise = Literal["hold", "note"]
WhenUndecided = Literal["release", "hold"]


class _Strict(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True, strict=True)


class Columns(_Strict):
    """Which columns of the feed are what."""

    time: Text = Field(description="The column of time stamps.")
    series: Texts = Field(default=(), description="The column, or columns, of the series' key; none: one series.")
    values: Texts = Field(default=(), description="The columns of numbers that rules judge.")


class FileKeys(_Strict):
    """A rule file of sercheck."""

    feed: Word = Field(description="Name of the feed.")
    about: Text | None = Field(default=None, description="What the feed is, for the person on call.")
    columns: Columns = Field(description="Which columns are what.")
    every: Cadence = Field(description="Cadence: a pandas offset (1h, 15min, D, B, MS) or irregular.")
    timezone: Zone = Field(default="UTC", description="Zone of stamps without an offset.")
    season_clock: Zone | None = Field(default=None, description="Zone whose clock the cycles follow, where it differs.")
    closed_days: ClosedDays | None = Field(default=None, description="Dates, or a file of dates, one a line.")
    seasons: Seasons = Field(default={}, description="Cycles: a name and its length in time or steps.")
    window: Window = Field(default="batch", description="The stretch that is judged: batch, or a length.")
    batch_every: Period | None = Field(default=None, description="How often a batch comes.")
    false_holds: FalseHolds | None = Field(default=None, description="The alarm budget, such as 1 per 90D.")
    false_alarm: Risk | None = Field(default=None, description="The false-alarm risk of every rule for one batch.")
    otherwise: Otherwise = Field(default="hold", description="What a failed rule does: hold or note.")
    when_undecided: WhenUndecided = Field(default="release", description="An undecided rule: release or hold.")
    tell: Desks = Field(default=(), description="Desks that are told.")
    history: History = Field(default=(), description="Files or globs of history, or a source and a table or query.")
    baseline: Baseline = Field(default={}, description="From when to learn, and how often to learn anew.")
    limits: Limits = Field(default={}, description="Most memory and time of one run, such as 2GB and 10min.")
    rules: list[Any] = Field(description="The rules.", min_length=1)


class RuleKeys(_Strict):
    """The keys that every rule may have; further ones belong to its measure."""

    name: Text = Field(description="Name of the rule, once in a file.")
    measure: Text = Field(description="The statistic that is looked at.")
    stays: dict[str, Any] = Field(description="What is bounded: below, above, between, like or present.")
    about: Text | None = Field(default=None, description="What a failure means, for the person on call.")
    of: Texts | None = Field(default=None, description="Value columns that are judged; default all.")
    only: Texts = Field(default=(), description="Globs of series' keys; default all series.")
    after: Any = Field(default=None, description="Transforms that come first, in order.")
    window: Window | None = Field(default=None, description="The stretch that is judged; default the file's.")
    false_alarm: Risk | None = Field(default=None, description="False-alarm risk for one batch, all series and lags.")
    weight: Positive | None = Field(default=None, description="Its share of the alarm budget, beside the others'.")
    matters: Positive | None = Field(default=None, description="The smallest change worth knowing.")
    across: Across = Field(default=("batch",), description="How the risk is shared among series.")
    otherwise: Otherwise | None = Field(default=None, description="What a failure does; default the file's.")
    when_undecided: WhenUndecided | None = Field(default=None, description="What an undecided outcome does.")
    tell: Desks | None = Field(default=None, description="Desks told; default the file's, if the rule holds.")
    runbook: Text | None = Field(default=None, description="Where to read what to do: a link or a path.")
