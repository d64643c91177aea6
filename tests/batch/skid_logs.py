"""A pilot skid with six meters (invented), and logs of it."""

from __future__ import annotations

import numpy as np
import pandas as pd

SKID = """\
reconcile: 1
title: Membrane skid (invented)
domains:
  fluid: {unit: kg/h}
streams:
  feed:      outside -> tee
  recycle:   splitter -> tee
  discharge: tee -> module
  permeate:  module -> outside
  retentate: module -> splitter
  bleed:     splitter -> outside
meters:
  F: {reads: feed.flow,      unit: kg/h, sigma: 0.5 kg/h}
  R: {reads: recycle.flow,   unit: kg/h, sigma: 1.5 kg/h}
  D: {reads: discharge.flow, unit: L/min, sigma: 2.0 L/min}
  P: {reads: permeate.flow,  unit: kg/h, sigma: 0.4 kg/h}
  T: {reads: retentate.flow, unit: kg/h, sigma: 1.6 kg/h}
  B: {reads: bleed.flow,     unit: kg/h, sigma: 0.2 kg/h}
design:
  feed.flow: 50 kg/h
figures:
  recovery: permeate.flow / feed.flow
settings: {level: LEVEL}
""".replace("L/min", "kg/h")
TAGS = ["F", "R", "D", "P", "T", "B"]
TRUE = np.array([50.0, 150.0, 200.0, 40.0, 160.0, 10.0])
SIGMA = np.array([0.5, 1.5, 2.0, 0.4, 1.6, 0.2])


def skid_log(rows, seed=0, *, missing=0.05, drift=0.0, start="2024-01-01"):
    """Readings of a skid that runs steadily, with cells missing and the recycle's meter drifting in the second half."""
    rng = np.random.default_rng(seed)
    y = TRUE + SIGMA * rng.normal(size=(rows, 6))
    y[rows // 2 :, 1] += np.linspace(0.0, drift, rows - rows // 2)
    y[rng.random(y.shape) < missing] = np.nan
    y[0] = TRUE
    frame = pd.DataFrame(y.round(4), columns=TAGS)
    frame.insert(0, "time", pd.date_range(start, periods=rows, freq="min").strftime("%Y-%m-%d %H:%M:%S"))
    return frame
