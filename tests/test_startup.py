"""What a small batch costs beside starting Python: only what is needed is imported. Figures are ratios in one run."""

import importlib
import resource
import statistics
import subprocess
import sys

import numpy as np
import pytest

RULES = """
feed: one
columns: {time: t, values: [v]}
every: 1h
rules:
  - name: little memory
    measure: autocorrelation
    lag: 1
    stays: {below: 0.5}
  - name: level
    measure: level
    stays: {between: [-1, 1]}
"""
MOST = 2.5
"""CPU of one gate over that of importing pandas, yaml and click: what a step of a pipeline may cost (ours)."""


@pytest.fixture
def one(tmp_path):
    """A rule file and a batch of one series of 168 hours."""
    hours = np.arange("2026-01-01", "2026-01-08", dtype="datetime64[h]")
    values = np.random.default_rng(1).normal(size=168)
    rows = "".join(f"{hour}:00:00Z,{value:.4f}\n" for hour, value in zip(hours, values, strict=True))
    (tmp_path / "batch.csv").write_text("t,v\n" + rows)
    (tmp_path / "rules.yaml").write_text(RULES)
    return tmp_path


def cpu(call, folder):
    """User and system seconds of one process."""
    before = resource.getrusage(resource.RUSAGE_CHILDREN)
    subprocess.run(call, cwd=folder, check=True, capture_output=True)
    after = resource.getrusage(resource.RUSAGE_CHILDREN)
    return after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime


def test_a_small_batch_costs_little_more_than_starting_up(one):
    """Reading, judging and storing one series costs at most 2.5 times the CPU of the usual imports, median of pairs."""
    gate = [sys.executable, "-m", "sercheck", "gate", "rules.yaml", "batch.csv"]
    imports = [sys.executable, "-c", "import pandas, yaml, click"]
    cpu(gate, one), cpu(imports, one)
    ratios = [cpu(gate, one) / cpu(imports, one) for _ in range(5)]
    assert statistics.median(ratios) <= MOST, ratios


def test_what_is_not_needed_is_not_imported(one):
    """No pandas, statsmodels, scipy.stats or plotting on the path of a CSV file."""
    code = (
        "import sys; from sercheck.cli import main\n"
        "sys.argv = ['sercheck', 'gate', 'rules.yaml', 'batch.csv']\n"
        "try:\n    main()\n"
        "except SystemExit as end:\n"
        "    heavy = {'pandas', 'statsmodels', 'scipy.stats', 'matplotlib', 'dask'}\n"
        "    print(end.code, sorted(heavy & set(sys.modules)))\n"
    )
    done = subprocess.run([sys.executable, "-c", code], cwd=one, check=True, capture_output=True, text=True)
    assert done.stdout.strip() == "0 []"


@pytest.mark.parametrize("name", ["sercheck", "sercheck.serial"])
def test_the_public_names_are_listed_though_imported_late(name):
    """`dir` and so the completion of a prompt show them, and each is there."""
    module = importlib.import_module(name)
    assert dir(module) == sorted(module.__all__)
    assert all(getattr(module, public) is not None for public in dir(module))
