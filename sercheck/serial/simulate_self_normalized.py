"""Makes ``self_normalized_table.py`` by simulation: ``python -m sercheck.serial.simulate_self_normalized``; numpy only.

White normal series of each length, 400,000 of them, seed 20100; the statistic of Shao and Zhang (2010).
"""

from __future__ import annotations

import importlib
import sys
from pathlib import Path

import numpy as np

PROBABILITIES = (0.9, 0.5, 0.2, 0.1, 0.05, 0.02, 0.01, 0.005, 0.002, 0.001, 0.0005, 0.0002, 0.0001)
SIZES = (96, 168, 336, 1000)
SERIES = 400_000
SEED = 20100
BLOCK = 4000

HEAD = '''"""Upper quantiles of Shao and Zhang's (2010) statistic on white normal series; depends on nothing.

Made by ``simulate_self_normalized``: {series} series of each length, seed {seed}.
"""

from __future__ import annotations

PROBABILITIES = {probabilities}
"""Upper tail probabilities, one for each column."""
SIZES = {sizes}
"""Lengths of the series, one for each row."""
QUANTILES = (
{rows}
)
"""The statistic that is exceeded with the column's probability at the row's length."""
'''


def quantiles(size: int, rng: np.random.Generator) -> list[float]:
    """Simulated quantiles of one length."""
    statistic = importlib.import_module("sercheck.serial.change_point").self_normalized
    values = [statistic(rng.normal(size=(BLOCK, size))) for _ in range(SERIES // BLOCK)]
    return [round(float(q), 3) for q in np.quantile(np.concatenate(values), 1 - np.array(PROBABILITIES))]


def main() -> None:
    """Simulate and write the table beside this file."""
    rng = np.random.default_rng(SEED)
    rows = "\n".join(f"    ({', '.join(map(str, quantiles(size, rng)))})," for size in SIZES)
    text = HEAD.format(series=f"{SERIES:,}", seed=SEED, probabilities=PROBABILITIES, sizes=SIZES, rows=rows)
    Path(__file__).with_name("self_normalized_table.py").write_text(text, encoding="utf-8")
    sys.stderr.write("written\n")


if __name__ == "__main__":
    main()
