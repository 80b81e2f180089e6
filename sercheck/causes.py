"""The words for what may be wrong with a batch, shared by the fault catalogue and the causes; imports nothing.

A cause is what the person on call would say on the telephone; details (which key, how many steps) follow it.
"""

WRONG_ORDER = "rows in the wrong order"
NOISE = "noise in place of signal"
FILLED = "values filled forward"
INTERPOLATED = "values interpolated"
SMOOTHED = "values smoothed"
STUCK = "values stuck"
REPEATED = "repeated rows"
AGAIN = "earlier delivery again"
SLIPPED = "clock slipped"
GONE = "season gone"
FLATTENED = "season flattened"
GROWN = "season exaggerated"
INTERLEAVED = "two sources interleaved"
TOTAL = "running total instead of increments"
DIFFERENCED = "differenced"
TWICE = "differenced twice"
UNIT = "unit changed"
SPREAD = "coarser data spread over finer stamps"
SIGN = "sign turned"
MIRRORED = "values mirrored"
SWAPPED = "keys swapped"
SHIFTED = "level shifted"
ROUNDED = "values rounded"
MISSING = "rows missing"
LATE = "delivery late"
UNKNOWN = "no known signature"

CAUSES = (
    WRONG_ORDER, NOISE, FILLED, INTERPOLATED, SMOOTHED, STUCK, REPEATED, AGAIN, SLIPPED, GONE, FLATTENED, GROWN,
    INTERLEAVED, TOTAL, DIFFERENCED, TWICE, UNIT, SPREAD, SIGN, MIRRORED, SWAPPED, SHIFTED, ROUNDED, MISSING,
    LATE,
)  # fmt: skip
"""All causes that can be named."""
