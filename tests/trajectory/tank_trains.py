"""An invented train of two buffer tanks: its case, true values, and readings of them."""

from __future__ import annotations

import numpy as np

TRAIN = """\
reconcile: 1
title: Two buffer tanks in series (invented)
domains:
  fluid: {unit: kg/h}
nodes:
  tank_1: {stores: true}
  tank_2: {stores: true}
streams:
  feed: outside -> tank_1
  mid: tank_1 -> tank_2
  out: tank_2 -> outside
meters:
  F1: {reads: feed.flow, unit: kg/h, sigma: 2 kg/h}
  F2: {reads: mid.flow, unit: kg/h, sigma: 1.5 kg/h}
  F3: {reads: out.flow, unit: kg/h, sigma: 2.5 kg/h}
  L1: {reads: tank_1.inventory, unit: kg, sigma: 1 kg}
  L2: {reads: tank_2.inventory, unit: kg, sigma: 1.2 kg}
trajectory:
  inventories: {tank_1: kg, tank_2: kg}
  read_at: start
  step: 15 min
"""
TAGS = ["F1", "F2", "F3", "L1", "L2"]


def tank_train(windows: int, seed: int):
    """True flows and inventories at the start of each window, and readings of them with the sigmas of the case."""
    rng = np.random.default_rng(seed)
    t = np.arange(windows)
    flow = np.column_stack([100 + 10 * np.sin(t / 3), 96 + 6 * np.cos(t / 4), np.full(windows, 97.0)])
    change = 0.25 * (flow[:, :2] - flow[:, 1:])
    held = np.array([50.0, 80.0]) + np.vstack([np.zeros(2), np.cumsum(change, axis=0)[:-1]])
    truth = np.hstack([flow, held])
    return truth, truth + rng.normal(size=truth.shape) * [2, 1.5, 2.5, 1, 1.2]
