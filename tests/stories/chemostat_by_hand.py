"""An invented chemostat as a case, and its two checks worked by hand.

Carbon: 6 glucose - CO2 - biomass = 0. Electrons: 24 glucose - 4 oxygen - 4.2 biomass = 0, the degrees of reduction being
24 (glucose), -4 (O2), 0 (CO2) and 4.2 (CH1.8O0.5N0.2 from ammonia); Roels, "Energetics and Kinetics in Biotechnology"
(1983), ch. 3.
"""

import numpy as np

CASE = """
reconcile: 1
title: Chemostat (invented figures)
domains:
  elements:
    unit: mmol/h
    species: {glucose: C6H12O6, oxygen: O2, carbon_dioxide: CO2, biomass: CH1.8O0.5N0.2, ammonia: NH3, water: H2O}
    hidden: {acetate: C2H4O2, ethanol: C2H6O}
    nitrogen_source: NH3
nodes:
  reactor: {reacts: true}
streams:
  feed:    {path: outside -> reactor, species: glucose}
  uptake:  {path: outside -> reactor, species: oxygen}
  base:    {path: outside -> reactor, species: ammonia}
  offgas:  {path: reactor -> outside, species: carbon_dioxide}
  harvest: {path: reactor -> outside, species: [biomass, water]}
meters:
  glucose: {reads: feed.glucose, unit: mmol/h, sigma: 0.2 mmol/h}
  O2:      {reads: uptake.oxygen, unit: mmol/h, sigma: 0.9 mmol/h}
  CO2:     {reads: offgas.carbon_dioxide, unit: mmol/h, sigma: 0.9 mmol/h}
  biomass: {reads: harvest.biomass, unit: mmol/h, sigma: 1.2 mmol/h}
figures:
  RQ: offgas.carbon_dioxide / uptake.oxygen
"""
TAGS = ["glucose", "O2", "CO2", "biomass"]
SIGMA = np.array([0.2, 0.9, 0.9, 1.2])
CHECKS = np.array([[6.0, 0.0, -1.0, -1.0], [24.0, -4.0, 0.0, -4.2]])
PRODUCT = {"acetate": np.array([2.0, 8.0]), "ethanol": np.array([2.0, 12.0])}
"""Carbon and electrons that one mol of an unseen product takes away."""


def objective(readings):
    """r' V^-1 r of the two closures."""
    r = CHECKS @ [readings[t] for t in TAGS]
    return float(r @ np.linalg.solve(_spread(), r))


def one_fault(readings, fault):
    """Size, sigma and what is left when one fault is granted: a tag, or an unseen product."""
    r = CHECKS @ [readings[t] for t in TAGS]
    shift = PRODUCT[fault] if fault in PRODUCT else CHECKS[:, TAGS.index(fault)]
    weighted = np.linalg.solve(_spread(), shift)
    size, sigma = weighted @ r / (weighted @ shift), (weighted @ shift) ** -0.5
    return float(size), float(sigma), float(objective(readings) - (size / sigma) ** 2)


def adjusted(readings):
    """Least squares under both checks, and the sigmas of the result."""
    y = np.array([readings[t] for t in TAGS])
    gain = (SIGMA**2)[:, None] * CHECKS.T @ np.linalg.inv(_spread())
    covariance = np.diag(SIGMA**2) - gain @ CHECKS @ np.diag(SIGMA**2)
    return y - gain @ CHECKS @ y, np.sqrt(np.diag(covariance))


def _spread():
    return CHECKS @ np.diag(SIGMA**2) @ CHECKS.T
