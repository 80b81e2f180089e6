"""Upper quantiles of Shao and Zhang's (2010) statistic on white normal series; depends on nothing.

Made by ``simulate_self_normalized``: 400,000 series of each length, seed 20100.
"""

from __future__ import annotations

PROBABILITIES = (0.9, 0.5, 0.2, 0.1, 0.05, 0.02, 0.01, 0.005, 0.002, 0.001, 0.0005, 0.0002, 0.0001)
"""Upper tail probabilities, one for each column."""
SIZES = (96, 168, 336, 1000)
"""Lengths of the series, one for each row."""
QUANTILES = (
    (2.861, 7.602, 18.708, 28.653, 39.827, 55.717, 69.481, 83.883, 104.983, 122.21, 141.988, 165.707, 191.862),
    (2.91, 7.624, 18.818, 28.917, 40.088, 56.684, 70.629, 85.422, 105.79, 123.643, 139.369, 163.949, 184.211),
    (2.95, 7.682, 19.016, 29.21, 40.545, 57.256, 71.554, 86.648, 108.037, 126.588, 146.663, 173.294, 196.362),
    (2.987, 7.707, 19.079, 29.478, 40.958, 58.019, 71.979, 87.611, 107.238, 125.888, 143.019, 166.715, 187.195),
)
"""The statistic that is exceeded with the column's probability at the row's length."""
