"""The sentences of a study, for the terminal and the page alike; depends on ``series`` and ``whole``."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from sercheck.errors import UsageError
from sercheck.intake.calendar import parse_length
from sercheck.intake.zone import DAY, SECOND
from sercheck.portrait.findings import Finding
from sercheck.portrait.series import Portrait, Season
from sercheck.portrait.whole import Study

FEWEST = 20
"""Values from which differencing and the worth of the mean are spoken of (as where both are measured)."""
LONG_DAYS = 3
"""Days from which a season's length is told in days."""


@dataclass(frozen=True)
class Group:
    """Series that are alike: the same seasons, differences and kind of level."""

    members: tuple[Portrait, ...]

    @property
    def first(self) -> Portrait:
        return self.members[0]


def groups(portraits: Sequence[Portrait]) -> list[Group]:
    """The series that are alike, the largest group first; within a group the one with the most findings first."""
    found: dict[tuple[object, ...], list[Portrait]] = {}
    for one in portraits:
        seasons = tuple(sorted(season.steps for season in one.seasons))
        found.setdefault((one.column, seasons, one.wanders, _sign(one)), []).append(one)
    return [Group(tuple(same)) for same in sorted(found.values(), key=len, reverse=True)]


def _sign(one: Portrait) -> float:
    return 0.0 if one.slope is None else float(np.sign(one.slope))


def kind(one: Portrait) -> str:
    """``trend and season``, ``trend``, ``season`` or ``neither``; a level that wanders counts as a trend."""
    moves = one.slope is not None or one.wanders
    return "trend and season" if moves and one.seasons else "trend" if moves else "season" if one.seasons else "neither"


def shape(group: Group, every: str) -> str:
    """What the series of a group look like: trend, season, both or neither, in one sentence."""
    one = group.first
    if one.n < 8:
        return f"Only {one.n} values: too few to tell a trend or a season."
    if one.deviation is None or not np.isfinite(one.r).any():
        return "All values are equal: there is nothing to tell." if one.n else "No value at all."
    level = _level(group)
    seasons = [_season(group, season, every) for season in one.seasons]
    if not seasons:
        moves = kind(one) == "trend"
        return f"{level[:1].upper()}{level[1:]}, and no season." if moves else "Neither trend nor season."
    told = " and ".join(seasons) if len(seasons) < 3 else f"{', '.join(seasons[:-1])} and {seasons[-1]}"
    return f"A season of {told}; {level}."


def _level(group: Group) -> str:
    one = group.first
    if one.slope is not None:
        size = f" of {one.slope:.3g} a step" if len(group.members) == 1 else ""
        wander = ", about which the level wanders" if one.wanders else ""
        return f"a trend {'up' if one.slope > 0 else 'down'}{size}{wander}"
    return "a level that wanders without coming back (a moving trend)" if one.wanders else "no trend"


def _season(group: Group, season: Season, every: str) -> str:
    shares = [own.share for one in group.members for own in one.seasons if own.steps == season.steps]
    name = season.name or length_text(season.steps, every)
    inside = f"{name}, " if name else ""
    return f"{season.steps} steps ({inside}{_percent(float(np.median(shares)))} of the variance)"


def _percent(share: float) -> str:
    return f"{share:.0%}" if share >= 0.095 else f"{share:.1%}"


def length_text(steps: int, every: str) -> str:
    """A number of steps as a length in time, empty where that says nothing."""
    try:
        length = parse_length(every)
    except UsageError:
        return ""
    size = {"fixed": length.size, "days": length.size * DAY}.get(length.kind, 0) * steps
    if not size:
        return ""
    if size >= LONG_DAYS * DAY:
        return f"{size / DAY:.4g} days"
    hours = size / (3600 * SECOND)
    return f"{hours:.4g} hours" if hours >= 1 else f"{size / (60 * SECOND):.4g} minutes"


def differencing_text(one: Portrait) -> str:
    """Which differences are advised, and what one more would show."""
    if one.r1 is None or one.n < FEWEST:
        return ""
    more = f"{one.r1_more:.2f}" if one.r1_more is not None else "unknown"
    mark = " (near -.5, which differencing makes of noise: one too many)" if one.over else ""
    if not one.difference:
        own = " (the seasons' means taken out)" if one.seasons else ""
        now = f"lag-1 autocorrelation is {one.r1:.2f}{own}"
        return f"No differencing: {now}; after a difference it would be {more}{mark}."
    told = " and then at lag ".join(str(steps) for steps in one.difference)
    return f"Difference at lag {told}: lag-1 autocorrelation is then {one.r1:.2f}; after one more {more}{mark}."


def mean_text(one: Portrait) -> str:
    """What the mean is worth, and what that does to a naive standard error."""
    if one.n_eff_mean is None or one.deviation is None or one.n < FEWEST or one.error_ratio is None:
        return ""
    naive = one.deviation / np.sqrt(one.n)
    seasons = ", seasons taken out," if one.seasons else ""
    ratio = one.error_ratio
    worth = f"{one.n_eff_mean:,.0f}" if one.n_eff_mean >= 10 else f"{one.n_eff_mean:.2g}"
    text = f"The mean of {one.n:,} values{seasons} is worth that of {worth} independent ones: "
    if 0.9 <= ratio <= 1.1:
        return f"{text}its standard error is the naive {naive:.3g}."
    low = f"{ratio:.1f} times the naive {naive:.3g}" if ratio > 1 else f"{ratio:.2f} of the naive {naive:.3g}"
    return f"{text}its standard error is {low}."


def correlogram_text(one: Portrait) -> str:
    """The telling lags of the correlogram as text, for those who do not see it."""
    lags = telling(one)
    told = [f"{lag}: {_at(one, lag):.2f}" for lag in lags]
    outside = int(np.count_nonzero(np.abs(one.r) > one.band))
    place = one.lags.tolist().index(lags[0]) if lags else 0
    band = f"±{one.band[place]:.2f} at lag {lags[0]}" if lags else ""
    return f"r at lag {', '.join(told)}; {outside} of {len(one.lags)} lags beyond the band ({band})." if lags else ""


def telling(one: Portrait) -> list[int]:
    """The lags worth looking at: the first, those of the seasons, and twice the longest."""
    longest = max((season.steps for season in one.seasons), default=0)
    wanted = [1, *sorted(season.steps for season in one.seasons), 2 * longest]
    if not longest:
        wanted += [2, 3]
    there = set(one.lags[np.isfinite(one.r)].tolist())
    return [lag for lag in dict.fromkeys(wanted) if lag in there]


def _at(one: Portrait, lag: int) -> float:
    return float(one.r[one.lags == lag][0])


def name_of(one: Portrait, study: Study) -> str:
    """The series and, where there are several value columns or no key, the column."""
    parts = [one.series] if one.series else []
    if len(study.layout.values) > 1 or not one.series:
        parts.append(one.column)
    return " ".join(parts)


def by_kind(study: Study) -> list[tuple[str, list[tuple[Portrait, Finding]]]]:
    """Findings by kind, the kind that most series have first, and in a kind the largest first."""
    found: dict[str, list[tuple[Portrait, Finding]]] = {}
    for one in study.portraits:
        for finding in one.findings:
            found.setdefault(finding.what, []).append((one, finding))
    for same in found.values():
        same.sort(key=lambda pair: -pair[1].size)
    return sorted(found.items(), key=lambda item: -len(item[1]))


def head(study: Study) -> str:
    """The history in one line."""
    many = f"{study.series:,} series, " if study.layout.series else ""
    zone = f" ({study.layout.timezone})" if study.layout.timezone != "UTC" else ""
    every = "without a cadence" if study.layout.every == "irregular" else f"every {study.layout.every}{zone}"
    return f"{many}{study.rows:,} rows {every}, {study.first} to {study.last}"
