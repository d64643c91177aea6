"""Invented plants of any size for the tests of pages and figures."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd


def plant(folder: Path, rows: int, columns: int, *, snapshots: int = 1, seed: int = 7, timed: bool = True) -> Path:
    """Write a case: lines of vessels with cross-overs and recycles, and readings with one meter off in a stretch."""
    rng = np.random.default_rng(seed)
    streams: dict[str, tuple[str, str]] = {}
    for i in range(rows):
        streams[f"feed_{i}"] = ("outside", f"v{i}_0")
        for j in range(columns - 1):
            streams[f"s{i}_{j}"] = (f"v{i}_{j}", f"v{i}_{j + 1}")
        streams[f"out_{i}"] = (f"v{i}_{columns - 1}", "outside")
        if columns > 2:
            streams[f"back_{i}"] = (f"v{i}_{columns - 1}", f"v{i}_1")
        if i:
            for j in range(0, columns - 1, 2):
                streams[f"over_{i}_{j}"] = (f"v{i - 1}_{j}", f"v{i}_{j + 1}")
    nodes = sorted({n for pair in streams.values() for n in pair} - {"outside"})
    names = list(streams)
    balance = np.zeros((len(nodes), len(names)))
    for k, (a, b) in enumerate(streams.values()):
        if a != "outside":
            balance[nodes.index(a), k] -= 1
        if b != "outside":
            balance[nodes.index(b), k] += 1
    wanted = rng.uniform(60, 140, len(names))
    flow = wanted - balance.T @ np.linalg.lstsq(balance @ balance.T, balance @ wanted, rcond=None)[0]
    text = [
        "reconcile: 1",
        f"title: Plant of {len(names)} streams (invented)",
        "domains: {fluid: {unit: kg/h}}",
        "streams:",
    ]
    text += [f"  {n}: {a} -> {b}" for n, (a, b) in streams.items()]
    text.append("meters:")
    text += [f"  F_{n}: {{reads: {n}.flow, unit: kg/h, sigma: 1 kg/h}}" for n in names]
    text.append("settings: {max_faults: 1}")
    text.append("readings: {file: readings.csv, label_column: window}")
    folder.mkdir(parents=True, exist_ok=True)
    (folder / "case.yaml").write_text("\n".join(text) + "\n")
    read = flow + rng.normal(0, 1, (snapshots, len(names)))
    read[snapshots // 2 : snapshots // 2 + max(1, snapshots // 20), 1] += 9.0
    start = np.datetime64("2024-03-01T00:00")
    labels = [f"{start + np.timedelta64(i, 'h')}" if timed else f"w{i + 1}" for i in range(snapshots)]
    lines = [",".join(["window", *(f"F_{n}" for n in names)])]
    lines += [",".join([lab, *(f"{v:.3f}" for v in row)]) for lab, row in zip(labels, read, strict=True)]
    (folder / "readings.csv").write_text("\n".join(lines) + "\n")
    return folder / "case.yaml"


TANKS = """\
reconcile: 1
title: Day tank and header tank (invented)
domains: {fluid: {unit: kg/h}}
nodes:
  day: {stores: true}
  header: {stores: true}
streams: {make: outside -> day, transfer: day -> header, use: header -> outside}
meters:
  FM: {reads: make.flow, unit: kg/h, sigma: 2 kg/h}
  FT: {reads: transfer.flow, unit: kg/h, sigma: 1.5 kg/h}
  FU: {reads: use.flow, unit: kg/h, sigma: 2.5 kg/h}
  LD: {reads: day.inventory, unit: kg, sigma: 1 kg}
  LH: {reads: header.inventory, unit: kg, sigma: 1.2 kg}
figures: {share_used: use.flow / make.flow}
trajectory:
  inventories: {day: kg, header: kg}
  read_at: start
  step: 15 min
"""


def tanks(windows: int, seed: int = 11) -> pd.DataFrame:
    """Readings of two tanks in a row, window by window, with the sigmas that `TANKS` states."""
    rng = np.random.default_rng(seed)
    t = np.arange(windows)
    flow = np.column_stack([80 + 8 * np.sin(t / 4), 78 + 5 * np.cos(t / 5), np.full(windows, 79.0)])
    change = 0.25 * (flow[:, :2] - flow[:, 1:])
    held = np.array([60.0, 90.0]) + np.vstack([np.zeros(2), np.cumsum(change, axis=0)[:-1]])
    read = np.hstack([flow, held]) + rng.normal(size=(windows, 5)) * [2, 1.5, 2.5, 1, 1.2]
    times = pd.date_range("2025-05-04", periods=windows, freq="15min", name="time")
    return pd.DataFrame(read.round(3), columns=["FM", "FT", "FU", "LD", "LH"], index=times)
