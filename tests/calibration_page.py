"""Size and power on one page, for someone who decides whether to trust the tool; see ``calibration`` for the command.

Every figure on it comes from the tables that it is given or makes: nothing is typed in.
"""

from __future__ import annotations

from html import escape
from importlib.resources import files
from pathlib import Path

import numpy as np
import pandas as pd

from sercheck.page.svg import INKS, Drawing, drawing, inline
from tests import power
from tests.calibration import groups, missed, table_of

HEAD = """<!doctype html>
<html lang="en"><head><meta charset="utf-8"><meta name="viewport" content="width=device-width, initial-scale=1">
<meta name="color-scheme" content="light dark"><title>Does a threshold mean what it says?</title>
<style>{style}</style></head><body><main>
"""
LEAST = 1e-4
"""A rate of none is drawn here."""


def sizes(table: pd.DataFrame, risk: float, name: str) -> Drawing:
    """False alarms of healthy windows, a row for each question, a mark for each process and form."""
    cells = table[(table["risk"] == risk) & (table["judged"] >= 100)]
    questions = list(dict.fromkeys(cells["question"]))[::-1]
    with drawing(640, 60 + 22 * len(questions)) as (figure, axes):
        for place, question in enumerate(questions):
            some = cells[cells["question"] == question]
            for column, lift, mark, ink in (("naive_rate", 0.17, "x", "muted"), ("rate", -0.17, "o", "batch")):
                rates = np.maximum(some[column].dropna().to_numpy(), LEAST)
                axes.plot(rates, np.full(len(rates), place + lift), mark, color=INKS[ink], markersize=3.5, alpha=0.7)
        axes.axvline(risk, color=INKS["rule"], linewidth=1)
        axes.set_xscale("log")
        axes.set_xlim(LEAST * 0.8, 1.1)
        axes.set_yticks(range(len(questions)))
        axes.set_yticklabels(questions)
        axes.set_xlabel(f"share of healthy windows that fail; line: the risk asked, {risk:g}")
        beyond = (cells["naive_rate"] > 2 * risk).sum()
        ours = (cells["rate"] > 2 * risk).sum()
        return inline(
            figure, name, f"At a risk of {risk:g}, {ours} of {len(cells)} cells fail more than twice as often as "
            f"asked; by limits for independent rows {beyond} do.",
        )  # fmt: skip


def curve(cell: pd.DataFrame, name: str, title: str) -> Drawing:
    """Share found against the size of the change."""
    with drawing(320, 200) as (figure, axes):
        axes.plot(cell["size"], cell["naive"], "x:", color=INKS["muted"], markersize=4, label="independent rows")
        axes.plot(cell["size"], cell["oracle"], "--", color=INKS["ink"], label="knows the process")
        axes.plot(cell["size"], cell["found"], "o-", color=INKS["batch"], markersize=4, label="sercheck")
        axes.fill_between(cell["size"], cell["low"], cell["high"], color=INKS["band"], alpha=0.5, linewidth=0)
        axes.set_ylim(-0.02, 1.02)
        axes.set_title(title, fontsize=10)
        axes.set_xlabel("size of the change")
        axes.legend(fontsize=8, frameon=False)
        last = cell.iloc[-1]
        told = f"{title}: of the largest change {last['found']:.2f} are found, {last['oracle']:.2f} by the oracle."
        return inline(figure, name, told)


def page(table: pd.DataFrame, found: pd.DataFrame, command: str) -> str:
    """The page as HTML."""
    replications = int(table["records"].max())
    parts = [HEAD.format(style=files("sercheck.page").joinpath("style.css").read_text(encoding="utf-8"))]
    judged = table[table["most"].notna() & (table["judged"] > 0)]
    outside, named = (judged["mark"] == "MISSES").sum(), (judged["mark"] == "known").sum()
    broken = judged[judged["naive"] > 0]
    naive = (broken["naive_rate"] > broken["most"]).sum()
    parts.append(
        f"<header class='answer'><h1>Does a threshold mean what it says?</h1><p>Healthy simulated feeds, "
        f"{table['process'].nunique()} processes, {table['question'].nunique()} questions, {replications:,} windows a "
        f"cell, through the gate. Of {len(judged):,} cells with a target {outside} are outside it and not named as "
        f"weak, {named} are named. By limits for independent rows {naive} cells would be above the same "
        f"targets.</p><p class='quiet small'>{escape(command)}</p></header>"
    )
    parts.append("<section><h2>How often healthy windows fail</h2><p>Dots: sercheck. Crosses: limits for independent "
                 "rows. Each mark is one process, form and length. Left of the line is careful.</p>")
    for place, risk in enumerate((0.05, 0.01)):
        parts.append(f"<figure>{sizes(table, risk, f'size{place}')}</figure>")
    parts.append("</section><section><h2>What is found</h2><p>Share of changed windows that fail at a risk of "
                 f"{power.RISK:g}. Dashed: the test of one who knows the process. Dotted: limits for independent rows, "
                 "whose curve begins where their false alarms are.</p><div style='display:flex;flex-wrap:wrap'>")
    for place, (keys, cell) in enumerate(found.groupby(["question", "process", "asked", "n"], sort=False)):
        question, process, asked, n = keys
        title = f"{question}, {process}, {asked}, {n} rows"
        parts.append(f"<figure style='flex:1 1 17rem'>{curve(cell, f'power{place}', title)}</figure>")
    parts.append("</div></section><section><h2>Cells outside their targets</h2><ul>")
    parts += [f"<li>{escape(line)}</li>" for line in missed(table).splitlines()]
    parts.append("</ul></section></main></body></html>\n")
    return "\n".join(parts)


def write(path: Path, table: Path | None, curves: Path | None, replications: int, seed: int) -> int:
    """Write the page from these tables; those that are not given are made."""
    whole = pd.read_parquet(table) if table else table_of(groups(), replications, seed=seed)
    found = pd.read_parquet(curves) if curves else power.of_changes(replications, seed=seed)
    counted = f"size: {int(whole['records'].max())} windows a cell, power: {int(found['judged'].max())}"
    command = f"python -m tests.calibration --page {path.name}; {counted}"
    path.write_text(page(whole, found, command), encoding="utf-8")
    print(f"wrote {path}")
    return 0
