"""Reads the values from outside under ``tests/reference``."""

from __future__ import annotations

import csv
import json
from functools import cache
from pathlib import Path

import numpy as np

FOLDER = Path(__file__).parent / "reference"


@cache
def opened(name):
    """A JSON file of the folder."""
    return json.loads((FOLDER / name).read_text(encoding="utf-8"))


@cache
def series(name):
    """One series; NaN is missing."""
    with (FOLDER / "data" / f"{name}.csv").open(encoding="utf-8") as file:
        values = np.array([float(row["value"] or "nan") for row in csv.DictReader(file)])
    values.flags.writeable = False
    return values


def season(name):
    """Steps of a season of the series."""
    return opened("reference_open.json")["series"][name]["season"]


def told(*names):
    """Every (series, name, value) of the open references that has one of these names, as an array."""
    return [
        (name, entry["name"], np.array(entry["value"]))
        for name, about in opened("reference_open.json")["series"].items()
        for entry in about["values"]
        if entry["name"] in names
    ]


def published():
    """Figures printed elsewhere."""
    return opened("reference_open.json")["published"]


def closed(name):
    """The rows of one block of the closed forms."""
    return opened("closed_form.json")[name]["rows"]
