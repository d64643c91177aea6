"""What the elements domain refuses, and what it says to write instead."""

import pickle

import pytest
from bare_systems import adjust
from elements_helpers import CHEMOSTAT, FERMENTATION, STORY, build, chemostat
from pydantic import ValidationError
from reconcile_elements import Elements
from reconcile_elements.options import ElementsNode, ElementsOptions, ElementsStream, unit_parts
from reconcile_elements.refusal import Mistake, Refusal

NO_WATER = {k: v for k, v in CHEMOSTAT.items() if k != "base"} | {"harvest": ("reactor", "outside", "biomass")}


def changed(**streams):
    return CHEMOSTAT | streams


@pytest.mark.parametrize(
    ("options", "says"),
    [
        ({"species": {"biomass": "CH1.8O0.5N0.2x"}}, "unexpected x at position 14"),
        ({"species": {"salt": "NA"}}, "did you mean 'Na'?"),
        ({"species": {}}, "at least 1"),
        ({"species": {"a b": "CO2"}}, "use letters, digits"),
        ({"species": {"total": "CO2"}}, "cannot name a species"),
        ({"species": {"x": "CO2"}, "unit": "kg/h"}, "'kg/h' is not an amount per time; write e.g. mol/h"),
        ({"species": {"x": "CO2"}, "hidden": {"y": "Q"}}, "unknown element 'Q'"),
        ({"species": {"x": "CO2"}, "uncertain": {"x": {"C": 0.0}}}, "sigma of C is not above zero"),
        ({"species": {"x": "CO2"}, "weighed": {"x": {"carbon_fraction": 40}}}, "less than or equal to 1"),
        ({"species": {"x": "CO2"}, "specie": {}}, "Extra inputs"),
    ],
)
def test_options_that_cannot_be(options, says):
    with pytest.raises(ValidationError) as caught:
        ElementsOptions(**options)
    assert says in str(caught.value)


@pytest.mark.parametrize("said", [True, "yes", "moist"])
def test_a_gas_is_dry_or_wet(said):
    with pytest.raises(ValidationError, match="does not say whether fractions and flow are of the wet or the dry gas"):
        ElementsStream(species=["oxygen", "carbon_dioxide"], gas=said)


def test_a_gas_volume_states_its_conditions():
    with pytest.raises(ValidationError, match="does not state a temperature and a pressure"):
        ElementsStream(species="oxygen", gas="dry", volume_at="normal")


@pytest.mark.parametrize(
    ("streams", "options", "says"),
    [
        ({}, {"conserve": ["C", "reduction"]}, "which is it: NH3 .*nitrogen-source-missing"),
        ({}, {"conserve": ["C", "reduction"], "nitrogen_source": "urea"}, "write NH3, NO3 or N2"),
        ({}, {"conserve": ["C", "Fe"]}, "'Fe' occurs in no species"),
        ({}, {"conserve": ["C", "reductoin"]}, "did you mean 'reduction'"),
        ({}, {"inert": ["nitrogen"]}, "inert: 'nitrogen' is not one of the species"),
        ({}, {"weighed": {"glucos": {}}}, "did you mean 'glucose'"),
        ({}, {"weighed": {"oxygen": {"carbon_fraction": 0.4}}}, "'oxygen' has no carbon"),
        ({}, {"weighed": {"biomass": {"sigma": 0.01}}}, "sigma of nothing"),
        ({}, {"uncertain": {"biomas": {"H": 0.1}}}, "did you mean 'biomass'"),
        ({}, {"uncertain": {"biomass": {"S": 0.1}}}, "'S' does not occur in 'biomass'"),
        ({}, {"uncertain": {"biomass": {"reduction": 0.1}}}, r"needs conserve: \[C, reduction\]"),
        ({}, {"reactions": {"r": "glucose + 5 oxygen -> 6 carbon_dioxide + 6 water"}}, "not balanced: O 16 on the"),
        ({}, {"reactions": {"water": "glucose -> glucos"}}, "both a species and a reaction"),
        ({"x": ("outside", "reactor", None)}, {}, "stream 'x' does not say what it holds"),
        ({"x": ("outside", "reactor", "glucos")}, {}, "stream 'x': 'glucos' is not one of the species"),
        (
            {"x": ("reactor", "outside", {"species": ["oxygen", "carbon_dioxide"], "gas": "wet"})},
            {},
            "wet gas, but water is not among its species",
        ),
        (
            {
                "x": (
                    "reactor",
                    "outside",
                    {"species": ["oxygen", "carbon_dioxide"], "volume_at": "0 C, 101.325 kPa"},
                )
            },
            {},
            "not whether it is dry or wet",
        ),
        (
            {"x": ("outside", "reactor", {"composition": {"oxygen": 20.9, "carbon_dioxide": 79.1}})},
            {},
            "adds up to 100, not 1; write fractions between 0 and 1",
        ),
        (
            {"x": ("outside", "reactor", {"composition": {"oxygen": 0.2, "carbon_dioxide": 0.1}})},
            {},
            "adds up to 0.3, not 1; write rest",
        ),
        (
            {"x": ("outside", "reactor", {"composition": {"oxygen": "rest", "carbon_dioxide": "rest"}})},
            {},
            "'rest' may stand once",
        ),
        (
            {
                "x": (
                    "outside",
                    "reactor",
                    {"composition": {"oxygen": 1.0}, "species": ["oxygen", "carbon_dioxide"]},
                )
            },
            {},
            "species and composition differ",
        ),
        ({"x": ("outside", "reactor", {"species": "oxygen", "current": True})}, {}, "no stream of electrons"),
    ],
)
def test_cases_that_contradict_themselves(streams, options, says):
    with pytest.raises(ValueError, match=says):
        chemostat(changed(**streams), **options)


@pytest.mark.parametrize(
    ("node", "options", "says"),
    [
        ({"reacts": ["growht"]}, {"reactions": {"growth": "glucose -> glucose"}}, "did you mean 'growth'"),
        ({"accumulates": ["sugar"], "reacts": True}, {}, "accumulates: 'sugar' is not one of"),
        (
            {"reacts": ["respiration"]},
            {"reactions": {"respiration": "glucose + 6 oxygen -> 6 carbon_dioxide + 6 water"}},
            "'ammonia' enters 'reactor' but never leaves it",
        ),
        (
            {"reacts": False},
            {},
            "'glucose' enters 'reactor' but never leaves it.*if it reacts there write reacts: true",
        ),
    ],
)
def test_nodes_that_contradict_themselves(node, options, says):
    with pytest.raises(ValueError, match=says):
        chemostat(node=node, **options)


@pytest.mark.parametrize(
    ("hidden", "says"),
    [
        ({"sulfide": "H2S"}, "'sulfide' .H2S. holds S, which no species here brings.*hidden-element"),
        # seven electrons instead of eight, if it were let through: an acetate rate that is 6 % too high
        (
            {"acetate": "C2H3O2-"},
            "charged, but charge is not conserved here; write the formula of its acid.*hidden-charge",
        ),
    ],
)
def test_products_that_cannot_form(hidden, says):
    with pytest.raises(ValueError, match=says):
        chemostat(hidden=hidden)


def test_a_product_needs_what_it_is_made_from():
    streams = {"feed": ("outside", "tank", "sugar"), "out": ("tank", "outside", "polymer")}
    options = {"species": {"sugar": "CH2O", "polymer": "C2H4O2"}, "hidden": {"alcohol": "C2H6O"}}
    with pytest.raises(
        ValueError, match=r"no reaction among the species of any node makes 'alcohol' .*hidden-impossible"
    ):
        build(streams, {"tank": {"reacts": True}}, **options)
    with pytest.raises(ValueError, match=r"alcohol cannot form, since no node reacts freely.*hidden-nowhere"):
        build({"feed": ("outside", "tank", "sugar"), "out": ("tank", "outside", "sugar")}, {"tank": {}}, **options)


def test_a_product_is_offered_only_where_it_can_form():
    streams = {
        "feed": ("outside", "first", "glucose"),
        "air": ("outside", "first", "oxygen"),
        "gas": ("first", "outside", ["carbon_dioxide", "water"]),
        "broth": ("first", "second", "glucose"),
        "out": ("second", "outside", "glucose"),
    }
    nodes = {"first": {"reacts": True}, "second": {"reacts": True}}
    system = build(streams, nodes, species=FERMENTATION, conserve=["C", "H", "O"], hidden={"ethanol": "C2H6O"})
    assert [n for n in system.names() if "hidden" in n] == ["first.hidden_ethanol"]


def test_a_charged_product_beside_ions_is_the_same_as_its_acid():
    ions = FERMENTATION | {"ammonia": "NH4+", "proton": "H+"}
    streams = CHEMOSTAT | {"acid": ("reactor", "outside", "proton")}
    sizes = []
    for formula in ("C2H3O2-", "C2H4O2"):
        system = chemostat(streams, species=ions, hidden={"acetate": formula})
        read = dict(zip(STORY, [(10.05, 0.2), (29.1, 0.9), (29.6, 0.9), (24.4, 1.2)], strict=True))
        _, solution = adjust(system, read)
        column = [system.column("reactor.hidden_acetate")]
        shift = solution.adjuster.signature_of_columns(solution.jacobian[:, column])[:, 0]
        sizes.append(float(shift @ solution.parity / (shift @ shift)))
    assert sizes == pytest.approx([2.9864, 2.9864], abs=5e-5)


def test_a_forgotten_species_is_noticed():
    # without ammonia and water no combination of the others conserves C, H, O and N
    with pytest.raises(ValueError, match="no reaction among") as caught:
        chemostat(NO_WATER)
    text = str(caught.value)
    assert "'biomass' leaves 'reactor'" in text
    assert "add the species that is missing as a stream without a meter" in text
    assert "[no-reaction]" in text


def test_a_product_that_no_stream_holds():
    streams = {"feed": ("outside", "tank", "glucose"), "out": ("tank", "outside", ["oxygen", "carbon_dioxide"])}
    with pytest.raises(ValueError, match="makes or uses 'water', which no stream there holds"):
        build(
            streams,
            {"tank": {"reacts": ["respiration"]}},
            species=FERMENTATION,
            reactions={"respiration": "glucose + 6 oxygen -> 6 carbon_dioxide + 6 water"},
        )


def test_composition_that_reactions_or_gas_losses_need_exactly():
    growth = {"growth": "7 glucose + 8 ammonia -> 40 biomass + 2 carbon_dioxide + 18 water"}
    with pytest.raises(ValueError, match="takes part in reaction 'growth'"):
        chemostat(
            CHEMOSTAT | {"uptake": ("outside", "reactor", "glucose")},
            {"reacts": ["growth"]},
            reactions=growth,
            uncertain={"biomass": {"H": 0.1}},
        )
    with pytest.raises(ValueError, match="write can_leak: false"):
        chemostat(
            changed(x=("reactor", "outside", {"species": ["oxygen", "biomass"], "gas": "dry"})),
            uncertain={"biomass": {"H": 0.1}},
        )
    with pytest.raises(ValueError, match="its carbon subscript is uncertain as well"):
        chemostat(weighed={"biomass": {"carbon_fraction": 0.4}}, uncertain={"biomass": {"C": 0.1}})


def test_all_mistakes_are_told_at_once():
    with pytest.raises(ValueError, match="species-unknown") as caught:
        chemostat(changed(x=("outside", "reactor", "sugar")), inert=["argon"], conserve=["Xe"])
    assert str(caught.value).count("\n") == 2


def test_electrons_need_a_rate_in_time_alone():
    streams = {
        "a": ("outside", "tank", {"species": "electron", "current": True}),
        "b": ("tank", "outside", "electron"),
    }
    with pytest.raises(ValueError, match="a current needs amounts per time, not mmol/L/h"):
        build(streams, {"tank": {}}, species={"electron": "e-"}, unit="mmol/L/h")


@pytest.mark.parametrize(
    ("unit", "mass", "volume", "rate"),
    [
        ("mol/h", "g/h", "L/h", 1 / 3600),
        ("mmol/min", "mg/min", "mL/min", 1e-3 / 60),
        ("kmol/d", "kg/d", "m3/d", 1e3 / 86400),
        ("mmol/L/h", "mg/L/h", "mL/L/h", None),
    ],
)
def test_units_that_belong_to_an_amount(unit, mass, volume, rate):
    assert unit_parts(unit) == {"mass": mass, "volume": volume, "mol_per_second": pytest.approx(rate) if rate else None}


@pytest.mark.parametrize("model", [ElementsOptions, ElementsStream, ElementsNode])
def test_every_option_is_described(model):
    assert all(field.description for field in model.model_fields.values())


def test_the_domain_says_what_it_is():
    assert Elements.name == "elements"
    assert Elements.summary
    assert Elements.caution
    assert len(Elements.forgotten) > 3


def test_refusals_survive_pickling():
    refusal = Refusal([Mistake("a-code", "what is wrong", "write this"), Mistake("b-code", "and this?", "yes")])
    again = pickle.loads(pickle.dumps(refusal))
    assert str(again) == "what is wrong; write this [a-code]\nand this? yes [b-code]"
    assert [m.code for m in again.mistakes] == ["a-code", "b-code"]
