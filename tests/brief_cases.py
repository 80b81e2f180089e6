"""Batches whose briefs are tested: a feed of tides, a feed with a hostile name, a wide feed."""

from __future__ import annotations

import numpy as np
import pandas as pd

RULES = """
feed: {feed}
about: {about}
columns: {{time: t, series: meter, values: [kwh]}}
every: 1h
timezone: Europe/Oslo
seasons: {{day: 1D}}
batch_every: 1D
false_holds: 1 per 90D
tell: [heat-desk]
rules:
  - name: {steps}
    measure: autocorrelation
    lag: 1
    after: difference
    stays: {{like: history}}
    about: {about}
    runbook: {runbook}
  - name: surprises of the usual size
    measure: innovations
    look: variance
    stays: {{like: history}}
  - name: the hours are delivered
    measure: completeness
    stays: {{above: 0.9}}
    runbook: Ring the heat desk and ask for a second delivery.
  - name: level as usual
    measure: level
    stays: {{like: history}}
    otherwise: note
"""
DAYS = 70
HOSTILE = (
    '<script>document.title="owned"</script><img src=x onerror="document.title=\'owned\'"> & "quoted" {{ 7*7 }}'
    " \x1b[31mred\x07 \u202egnirts desrever\u2066 **bold** [link](https://evil.example) `code` | cell |"
    " <!channel> @here"
)


def rules(feed="heat", about="Heat of each meter.", steps="steps as smooth as ever", runbook="https://wiki.example/steps"):
    """A rule file; every text may be hostile."""
    import json

    return RULES.format(**{name: json.dumps(text) for name, text in
                           (("feed", feed), ("about", about), ("steps", steps), ("runbook", runbook))})  # fmt: skip


def readings(days, first="2026-01-01", meters=("A", "B", "C"), seed=1):
    """Hours of a daily cycle with noise that remembers, stamps in UTC."""
    stamps = pd.date_range(first, periods=24 * days, freq="h", tz="Europe/Oslo")
    rng = np.random.default_rng(seed)
    frames = []
    for place, meter in enumerate(meters):
        noise = rng.normal(size=len(stamps))
        for i in range(1, len(noise)):
            noise[i] += 0.8 * noise[i - 1]
        cycle = 20 * np.sin(2 * np.pi * np.asarray(stamps.hour) / 24 + place)
        frames.append(pd.DataFrame({"t": stamps, "meter": meter, "kwh": 100 + cycle + noise}))
    return pd.concat(frames)


def split(frame):
    """History, and the last local day of it as the batch."""
    last = frame.t.max().normalize()
    return frame[frame.t < last], frame[frame.t >= last]


def broken(batch, seed=2):
    """The batch with the hours of each meter in random order, and some of the first meter's missing."""
    rng = np.random.default_rng(seed)
    told = batch.copy()
    told["kwh"] = told.groupby("meter").kwh.transform(lambda values: rng.permutation(values.to_numpy()))
    first = told.meter == told.meter.iloc[0]
    return told[~(first & told.t.dt.hour.between(3, 8))]
