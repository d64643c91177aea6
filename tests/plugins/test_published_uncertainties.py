"""Published examples of combining uncertainties, through a case with a small domain of its own."""

import numpy as np
import pytest

import reconcile


class Impedance(reconcile.Domain):
    """Resistance, reactance and impedance from voltage, current and phase."""

    name = "impedance"
    version = "1"
    summary = "one element in an alternating-current bench"
    needs_streams = False

    def build(self, network, system, options):
        u = system.variables("voltage", ["element"], unit="V", start=5.0)
        i = system.variables("current", ["element"], unit="A", start=0.02)
        phase = system.variables("phase", ["element"], unit="rad", start=1.0)
        r = system.variables("resistance", ["element"], unit="ohm", start=100.0)
        x = system.variables("reactance", ["element"], unit="ohm", start=200.0)
        z = system.variables("impedance", ["element"], unit="ohm", start=250.0)
        cosine = system.apply(
            lambda z, v: z * np.cos(v), z, phase, derivatives=lambda z, v: (np.cos(v), -z * np.sin(v))
        )
        sine = system.apply(lambda z, v: z * np.sin(v), z, phase, derivatives=lambda z, v: (np.sin(v), z * np.cos(v)))
        system.require(z * i - u == 0, names=["impedance"], kind="ohm", unit="V")
        system.require(r - cosine == 0, names=["resistance"], kind="ohm", unit="ohm")
        system.require(x - sine == 0, names=["reactance"], kind="ohm", unit="ohm")


class Orifice(reconcile.Domain):
    """What the mass flow through an orifice plate is made of."""

    name = "orifice"
    version = "1"
    summary = "quantities of the working formula of an orifice plate"
    needs_streams = False

    def build(self, network, system, options):
        for name in ("discharge", "expansibility", "pipe", "bore", "pressure_drop", "density"):
            system.variables(name, ["plate"], unit="fraction")


class Plugin:
    @staticmethod
    @reconcile.hookimpl
    def reconcile_domains():
        return [Impedance, Orifice]


def load(write_case, text):
    return reconcile.load_case(write_case("reconcile: 1\ntitle: Bench\nstreams: {}\n" + text), modules=[Plugin])


GUM_H2 = """
domains: {impedance: {}}
meters:
  V:   {reads: element.voltage, unit: V,   sigma: 1e-9 V}
  I:   {reads: element.current, unit: A,   sigma: 1e-12 A}
  phi: {reads: element.phase,   unit: rad, sigma: 1e-10 rad}
shared_errors:
  series:
    sigma: {V: 0.0032 V, I: 9.5e-6 A, phi: 0.00075 rad}
    meters: [V, I, phi]
    correlations: [[V, I, -0.36], [V, phi, 0.86], [I, phi, -0.65]]
"""


def test_resistance_reactance_and_impedance_from_correlated_readings(write_case):
    # JCGM 100:2008 (GUM), annex H.2: R 127.732(70), X 219.85(30), Z 254.26(24) ohm; correlations r(R,X) = -0.588,
    # r(R,Z) = -0.485, r(X,Z) = 0.993 (two digits read in the documentation of an open package, the third from memory)
    result = load(write_case, GUM_H2).run({"V": 4.9990, "I": 0.019661, "phi": 1.04446})
    at = [result.variables.index(f"element.{n}") for n in ("resistance", "reactance", "impedance")]
    assert result.adjusted[0, at] == pytest.approx([127.732, 219.85, 254.26], abs=0.005)
    cov = result.covariance()[np.ix_(at, at)]
    sigma = np.sqrt(np.diag(cov))
    assert sigma == pytest.approx([0.070, 0.30, 0.24], abs=0.005)
    assert cov[0, 1] / (sigma[0] * sigma[1]) == pytest.approx(-0.59, abs=0.005)
    assert cov[0, 2] / (sigma[0] * sigma[2]) == pytest.approx(-0.49, abs=0.005)
    assert cov[1, 2] / (sigma[1] * sigma[2]) == pytest.approx(0.99, abs=0.005)


ORIFICE = """
domains: {orifice: {}}
meters:
  C:   {reads: plate.discharge,     unit: fraction, sigma: 0.5 % of reading}
  eps: {reads: plate.expansibility, unit: fraction, sigma: 0.2 % of reading}
  D:   {reads: plate.pipe,          unit: fraction, sigma: 0.4 % of reading}
  d:   {reads: plate.bore,          unit: fraction, sigma: 0.07 % of reading}
  dp:  {reads: plate.pressure_drop, unit: fraction, sigma: 0.5 % of reading}
  rho: {reads: plate.density,       unit: fraction, sigma: 0.5 % of reading}
figures:
  flow: plate.discharge * plate.expansibility * plate.bore ** 2 / sqrt(1 - (plate.bore / plate.pipe) ** 4)
    * sqrt(plate.pressure_drop * plate.density)
"""


def test_flow_through_an_orifice_plate(write_case):
    # ISO 5167-1, practical working formula (from memory; numbers constructed): (dq/q)^2 = (dC/C)^2 + (de/e)^2
    # + (2 b^4/(1-b^4))^2 (dD/D)^2 + (2/(1-b^4))^2 (dd/d)^2 + (ddp/dp)^2/4 + (drho/rho)^2/4; b = 0.6: 0.6746 %
    read = {"C": 0.606, "eps": 0.99, "D": 0.1, "d": 0.06, "dp": 25000.0, "rho": 1.2}
    (flow,) = load(write_case, ORIFICE).run(read).figure_values()
    assert 100 * flow.sigma / flow.value == pytest.approx(0.6746, abs=5e-5)
    b4 = 0.6**4
    parts = {"C": 0.5, "eps": 0.2, "D": 0.4 * 2 * b4 / (1 - b4), "d": 0.07 * 2 / (1 - b4), "dp": 0.25, "rho": 0.25}
    whole = sum(v**2 for v in parts.values())
    assert flow.shares == pytest.approx({k: v**2 / whole for k, v in parts.items()}, rel=1e-6)
