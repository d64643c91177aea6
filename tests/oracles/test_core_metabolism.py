"""The core metabolism of E. coli: rank, elements, growth, and fluxes simulated with noise.

A linear programme of scipy gives the true fluxes; its growth rate is the one that is published for this model.
"""

from pathlib import Path

import numpy as np
import pytest
import yaml
from reconcile_elements.exact import rank
from reconcile_elements.formula import parse_formula
from reconcile_elements.masses import molar_mass
from reconcile_elements.reactions import imbalance, parse_reaction
from scipy.optimize import linprog
from stated_rates import check_alarms, check_intervals, columns

import reconcile

GROWTH = "Biomass_Ecoli_core"


@pytest.fixture(scope="module")
def model():
    raw = yaml.safe_load((Path(__file__).parent / "ecoli_core.yaml").read_text(encoding="utf-8"))
    species = {
        name: parse_formula(formula + (f"{charge:+d}" if charge else ""))
        for name, (formula, charge) in raw["metabolites"].items()
    }
    reactions = {name: parse_reaction(text, species, name=name) for name, (text, _, _) in raw["reactions"].items()}
    bounds = [tuple(limits) for _, *limits in raw["reactions"].values()]
    return species, reactions, bounds


def stoichiometry(species, reactions):
    return np.array([[float(r.get(s, 0)) for r in reactions.values()] for s in species])


@pytest.fixture(scope="module")
def fluxes(model):
    species, reactions, bounds = model
    goal = [-float(name == GROWTH) for name in reactions]
    found = linprog(goal, A_eq=stoichiometry(species, reactions), b_eq=np.zeros(len(species)), bounds=bounds)
    assert found.status == 0
    return found.x


def test_size_and_rank(model):
    # five of the 72 balances follow from the others
    species, reactions, _ = model
    assert (len(species), len(reactions)) == (72, 95)
    assert sum(len(r) == 1 for r in reactions.values()) == 20
    exact = [[r.get(s, 0) for r in reactions.values()] for s in species]
    assert rank(exact) == 67


def test_all_reactions_but_growth_conserve_elements_and_charge(model):
    species, reactions, _ = model
    assert [n for n, r in reactions.items() if len(r) > 1 and imbalance(r, species)] == [GROWTH]


def test_growth_rate_as_published(model, fluxes):
    # 0.8739215 per h on 10 mmol/(g h) glucose with air: the figure that is quoted with this model everywhere
    assert fluxes[list(model[1]).index(GROWTH)] == pytest.approx(0.8739215, abs=1e-6)


@pytest.mark.oracle
def test_the_table_is_the_model_file_of_the_package(model):
    cobra = pytest.importorskip("cobra", reason="needs the extra [oracles]")
    theirs = cobra.io.read_sbml_model(str(Path(cobra.__file__).parent / "data" / "textbook.xml.gz"))
    species, reactions, bounds = model
    assert {m.id for m in theirs.metabolites} == set(species)
    for m in theirs.metabolites:
        assert {e: float(n) for e, n in species[m.id].composition.items()} == m.elements
        assert float(species[m.id].charge) == m.charge
        # their atomic weights are older: carbon 12.0107, hydrogen 1.00794
        assert molar_mass(species[m.id]) == pytest.approx(m.formula_weight, rel=4e-5, abs=1e-3)
    for (name, reaction), limits in zip(reactions.items(), bounds, strict=True):
        their = theirs.reactions.get_by_id(name)
        assert {m.id: c for m, c in their.metabolites.items()} == {s: float(c) for s, c in reaction.items()}
        assert their.bounds == limits
    assert theirs.slim_optimize() == pytest.approx(0.8739215, abs=1e-6)


class Metabolism(reconcile.Domain):
    """Production and use of every metabolite cancel."""

    name = "metabolism"
    version = "1"
    summary = "steady fluxes of a metabolic network"
    needs_streams = False
    network_of_cell = None

    def build(self, network, system, options):
        species, reactions, _ = self.network_of_cell
        v = system.variables("flux", list(reactions), unit="mmol/h")
        system.require(stoichiometry(species, reactions) @ v == 0, names=list(species), kind="metabolite")


class Plugin:
    @staticmethod
    @reconcile.hookimpl
    def reconcile_domains():
        return [Metabolism]


def test_true_fluxes_lie_inside_the_stated_intervals(model, fluxes, write_case):
    species, reactions, _ = model
    Metabolism.network_of_cell = model
    names = list(reactions)
    rng = np.random.default_rng(72)
    read = sorted(rng.choice(len(names), 60, replace=False).tolist())
    sigma = 0.02 * np.abs(fluxes) + 0.1
    meters = {
        f"m_{names[j]}": {"reads": f"`{names[j]}.flux`", "unit": "mmol/h", "sigma": f"{float(sigma[j])!r} mmol/h"}
        for j in read
    }
    text = yaml.safe_dump(
        {"reconcile": 1, "title": "Core", "domains": {"metabolism": {}}, "streams": {}, "meters": meters}
    )
    case = reconcile.load_case(write_case(text), modules=[Plugin])
    readings = fluxes[read] + rng.normal(size=(400, len(read))) * sigma[read]
    result = case.run({tag: readings[:, j] for j, tag in enumerate(meters)})
    # checks = readings less the directions in which balances leave them free, by singular values of the whole matrix
    a = stoichiometry(species, reactions)
    unread = np.setdiff1d(np.arange(len(names)), read)
    assert np.linalg.matrix_rank(a) == 67
    assert set(result.checks) == {67 - np.linalg.matrix_rank(a[:, unread])}
    known = [n for n in names if np.isfinite(result.sigmas[0, result.variables.index(f"{n}.flux")])]
    null = np.linalg.svd(a[:, unread])[2][np.linalg.matrix_rank(a[:, unread]) :]
    told = [names[j] for k, j in enumerate(unread) if np.abs(null[:, k]).max(initial=0.0) < 1e-9]
    assert set(known) == {names[j] for j in read} | set(told)
    adjusted, sigmas = columns(result, [f"{n}.flux" for n in known])
    check_intervals(fluxes[[names.index(n) for n in known]], adjusted, sigmas)
    check_alarms(result.p_value)
    assert len(result.snapshot(0).dependent) == 5
