"""The fluid domain: masses, volumes, inventories, pressures."""

from __future__ import annotations

import pytest
from reconcile_fluid.pressure import LAMINAR_LIMIT, laminar_resistance, reynolds

import reconcile

HEAD = "reconcile: 1\ntitle: Test rig (invented)\n"


def case(write_case, text):
    return reconcile.load_case(write_case(HEAD + text))


MIX = """
domains: {fluid: {unit: L/min, conserve: mass}}
streams:
  brine: {path: outside -> tank, density: 1.2 kg/L}
  water: {path: outside -> tank, density: 1000 kg/m3}
  out:   {path: tank -> outside, density: 1.1 kg/L}
meters:
  B: {reads: brine.flow, unit: L/min, sigma: 0.1 L/min}
  W: {reads: water.flow, unit: L/min, sigma: 0.1 L/min}
  O: {reads: out.flow, unit: L/min, sigma: 0.1 L/min}
"""


def test_mass_is_conserved_where_densities_differ(write_case):
    exact = case(write_case, MIX).run({"B": 10.0, "W": 10.0, "O": 20.0})
    assert exact.objective[0] == pytest.approx(0.0, abs=1e-18)
    wrong = case(write_case, MIX).run({"B": 10.0, "W": 8.0, "O": 18.0})
    assert abs(wrong.snapshot(0).balances[0].before) > 0.1


def test_volumes_of_different_density_do_not_mix(write_case):
    with pytest.raises(reconcile.InputError, match="different density"):
        case(write_case, MIX.replace(", conserve: mass", ""))
    with pytest.raises(reconcile.InputError, match="missing for water"):
        case(write_case, MIX.replace("{path: outside -> tank, density: 1000 kg/m3}", "outside -> tank"))
    with pytest.raises(reconcile.InputError, match="are masses"):
        case(write_case, MIX.replace("L/min", "kg/h").replace("conserve: mass", "conserve: volume"))


def test_inventories_and_evaporation(write_case):
    text = """
domains: {fluid: {unit: kg/h}}
nodes: {tank: {stores: true, evaporates: true}}
streams: {in: outside -> tank, out: tank -> outside}
meters:
  I: {reads: in.flow, unit: kg/h, sigma: 1 kg/h}
  O: {reads: out.flow, unit: kg/h, sigma: 1 kg/h}
  L: {reads: tank.accumulation, unit: kg/h, sigma: 1 kg/h}
"""
    s = case(write_case, text).run({"I": 100.0, "O": 80.0, "L": 15.0}).snapshot(0)
    assert s.variable("tank.evaporation").adjusted == pytest.approx(5.0)
    assert s.test.checks == 0


LOOP = """
domains: {fluid: {unit: L/min, pressure_unit: mmHg}}
streams:
  pump:  outside -> inlet
  upper: {path: inlet -> outlet, resistance: laminar}
  lower: {path: inlet -> outlet, resistance: laminar}
  drain: outlet -> outside
meters:
  Q:  {reads: pump.flow, unit: L/min, sigma: 0.1 L/min}
  PI: {reads: inlet.pressure, unit: mmHg, sigma: 1 mmHg}
  PO: {reads: outlet.pressure, unit: mmHg, sigma: 1 mmHg}
known:
  upper.resistance: {value: 10 mmHg min/L}
  lower.resistance: {value: 40 mmHg min/L, sigma: 1 mmHg min/L}
"""


def test_two_branches_share_one_pressure_drop(write_case):
    result = case(write_case, LOOP).run({"Q": 5.0, "PI": 60.0, "PO": 20.0})
    value = dict(zip(result.variables, result.adjusted[0], strict=True))
    assert value["upper.flow"] == pytest.approx(4.0, abs=1e-9)
    assert value["lower.flow"] == pytest.approx(1.0, abs=1e-9)
    assert result.checks[0] == 1
    # No loop rule is written twice: with pressures at the nodes it holds by itself.
    assert result.snapshot(0).dependent == ()


def test_an_unknown_resistance_is_calculated(write_case):
    text = LOOP.replace("  lower.resistance: {value: 40 mmHg min/L, sigma: 1 mmHg min/L}\n", "")
    s = case(write_case, text).run({"Q": 5.0, "PI": 60.0, "PO": 20.0}).snapshot(0)
    line = s.variable("lower.resistance")
    assert line.klass == "calculated"
    assert line.adjusted == pytest.approx(40.0, rel=1e-9)


def test_a_branch_closed_off_as_a_what_if(write_case):
    text = LOOP.replace(
        "lower: {path: inlet -> outlet, resistance: laminar}",
        "lower: {path: inlet -> outlet, resistance: laminar, closed: true}",
    )
    result = case(write_case, text).run({"Q": 4.0, "PI": 60.0, "PO": 20.0})
    value = dict(zip(result.variables, result.adjusted[0], strict=True))
    assert value["lower.flow"] == 0.0
    assert value["upper.flow"] == pytest.approx(4.0, abs=0.2)


def test_static_head_and_turbulent_loss(write_case):
    text = """
domains: {fluid: {unit: m3/h, pressure_unit: kPa}}
streams:
  feed: outside -> low
  riser: {path: low -> high, resistance: turbulent, rise: 10 m, density: 1000 kg/m3}
  out: high -> outside
meters:
  Q: {reads: feed.flow, unit: m3/h, sigma: 0.01 m3/h}
  PL: {reads: low.pressure, unit: kPa, sigma: 0.1 kPa}
  PH: {reads: high.pressure, unit: kPa, sigma: 0.1 kPa}
known: {riser.resistance: {value: 2 kPa h2/m6}}
"""
    head = 1000 * 9.80665 * 10 / 1000
    result = case(write_case, text).run({"Q": 3.0, "PL": 200.0, "PH": 200.0 - head - 2 * 9.0})
    assert result.objective[0] == pytest.approx(0.0, abs=1e-12)
    with pytest.raises(reconcile.InputError, match="density is needed"):
        case(write_case, text.replace(", density: 1000 kg/m3", ""))


def test_poiseuille_against_published_numbers():
    # A hypodermic needle, 3.14 cm long, 0.35 mm bore, 1 g/s of water: 85254.55 Pa (worked answer on a public
    # homework site, read as a search excerpt). The source applies the laminar law above its limit.
    drop = laminar_resistance(0.0314, 0.00035, 1.0e-3) * 1.0e-6
    assert drop == pytest.approx(85254.55, rel=1e-5)
    assert reynolds(1.0e-6, 0.00035, 1000.0, 1.0e-3) == pytest.approx(3638, abs=1)
    assert reynolds(1.0e-6, 0.00035, 1000.0, 1.0e-3) > LAMINAR_LIMIT
    # Textbook companion example in CGS units: gradient 12500 dyn/cm3, d 0.445 cm, 8 P; flow computed 1.5038 cm3/s.
    resistance = laminar_resistance(0.01, 0.00445, 0.8)
    assert 1250.0 / resistance * 1e6 == pytest.approx(1.5038, rel=1e-3)
    # A relative error of the bore counts four times.
    assert laminar_resistance(1, 1.02, 1) / laminar_resistance(1, 1, 1) == pytest.approx(1.02**-4)
