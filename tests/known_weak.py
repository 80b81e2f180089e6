"""Cells of ``calibration`` that miss their targets: the one place where a weakness of a measure is named.

Each is excluded by the ``assumes`` of its records, or stands in the measure's docstring.
"""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import dataclass

if __package__:
    from tests.cells import ALONE, BESIDE, LIKE
else:
    from cells import ALONE, BESIDE, LIKE


@dataclass(frozen=True)
class Weak:
    """Cells that are known to miss.

    Attributes:
        questions: names of questions in ``cells``.
        asked: forms, with their side where only one of them misses.
        processes: names of processes.
        says: why, and by how much.
        rows: rows of the windows; all where it is empty.
    """

    questions: Collection[str]
    asked: Collection[str]
    processes: Collection[str]
    says: str
    rows: Collection[int] = ()


LONG_MEMORY = ("fractional .3", "wandering + AR .6")
EVOLVING = ("seasonal AR", "seasonal AR, declared")

KNOWN: tuple[Weak, ...] = (
    Weak(
        ("level", "spread", "rate", "quantile", "trend", "jump", "autocorrelation 1", "autocorrelation 6",
         "partial_autocorrelation 1", "partial_autocorrelation 2", "seasonal_lag", "steps", "effective_size"),
        (ALONE,), LONG_MEMORY,
        "short memory is taken for granted where there is no history: a window cannot show what wanders more slowly",
    ),
    Weak(
        ("quantile", "distribution", "spread", "cross_correlation of a part", "rate"), (BESIDE, LIKE), LONG_MEMORY,
        "memory as long as the window: shares and spreads of history's stretches scatter more than they show",
    ),
    Weak(
        ("level",), (f"above {ALONE}",), ("lognormal of AR .6",),
        "a long tail on one side: .098/.035/.009; a logarithm first, or history, mends it", (336,),
    ),
    Weak(
        ("partial_autocorrelation 2",), (f"above {ALONE}",), ("lognormal of AR .6",),
        "no linear process: .099/.030/.005; a logarithm first, or history, mends it",
    ),
    Weak(
        ("level", "trend", "jump"), (ALONE,), ("seasonal AR, declared",),
        "a declared cycle is taken out of the window as if it stayed the same: .16/.06/.02 of trends fail in 168 "
        "rows, .09/.03 of levels in 336",
    ),
    Weak(
        ("effective_size",), (f"below {ALONE}",), EVOLVING,
        "the autoregression does not reach the cycle's echo, so that rows look worth more than they are",
    ),
    Weak(
        ("jump",), (ALONE,), ("AR .9", "ARMA(2,1)"),
        "hardly a window is answered (3 to 5 %), and those are the ones whose memory looks short: of all windows .7 % "
        "fail at .05, of the answered .28", (168,),
    ),
    Weak(
        ("level",), (BESIDE,), ("profile + AR .6, clusters lost",),
        "a bound is about the hours that came: clusters of lost hours move what their level should be: .13/.05/.02",
    ),
    Weak(
        ("count",), (LIKE,), ("white, clusters lost", "AR .6, clusters lost", "AR .9, clusters lost",
                              "profile + AR .6, clusters lost"),
        "hardly a window is answered (2 %): counts of history hardly ever change, and those few are the odd ones",
    ),
    Weak(
        ("innovations' variance",), (f"below {BESIDE}",), ("t3", "GARCH, AR .6"),
        "a ratio of variances under heavy tails or changing variance: .033 at .01; scores, by `like: history`, hold",
    ),
)  # fmt: skip


def weakness(question: str, asked: str, process: str, n: int) -> str:
    """Why this cell may miss its target; empty where it may not."""
    for weak in KNOWN:
        form = any(asked == each or asked.endswith(f" {each}") for each in weak.asked)
        if question in weak.questions and form and process in weak.processes and (not weak.rows or n in weak.rows):
            return weak.says
    return ""
