"""The equilibrium engine: certificates, an independent solver, and properties any answer has."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import dosewright
from conic_peer import ConicPeer
from dosewright.chemistry.activity import activity_model
from dosewright.chemistry.system import system_of
from dosewright.equilibrium import certify, solve
from dosewright.errors import DosewrightError
from liquors import random_totals

ALL = tuple(dosewright.catalogue().components)


def solve_ideal(system, totals, enabled):
    return solve(system, activity_model("ideal", 25.0), totals, enabled=enabled)


def test_two_thousand_random_liquors_are_solved_with_passing_certificates():
    # totals over twelve decades, all components, every solid of the catalogue competing
    system = system_of(ALL, 25.0)
    enabled = system.enabled("all")
    totals = random_totals(system, np.random.default_rng(20261201), 2000, low=1e-12, high=2.0)
    for model in ("ideal", "davies"):
        states = solve(system, activity_model(model, 25.0), totals, enabled=enabled)
        assert (states.status == 0).all()
        figures = certify(states, totals, enabled)
        assert figures.balance_residual.max() <= 1e-9
        assert figures.mass_action_residual_ln.max() <= 1e-8
        assert abs(figures.charge_residual_eq_per_kg).max() <= 1e-9
        assert figures.present_gap_log10.max() <= 1e-8
        assert figures.supersaturation_log10.max() <= 1e-8


def test_engine_and_conic_solver_find_the_same_optimum():
    # clarabel (exponential cones) is a general-purpose peer: same convex problem, activity off
    system = system_of(ALL, 25.0)
    enabled = system.enabled("fast")
    totals = random_totals(system, np.random.default_rng(7), 220, low=1e-4, high=1.0)
    states = solve_ideal(system, totals, enabled)
    peer = ConicPeer(system, enabled)
    compared = 0
    for row in range(len(totals)):
        status, _, _, keep_c, _, objective = peer.solve(totals[row])
        if status != "Solved":
            continue  # the peer itself gave up: nothing to compare with
        ours = states.molality[row].sum() - totals[row, keep_c] @ states.ln_activity[row, keep_c]
        assert objective == pytest.approx(ours, rel=2e-7, abs=1e-9)
        # a lower objective than ours would mean that ours is no optimum
        assert ours <= objective + 1e-7 * abs(objective)
        compared += 1
    assert compared >= 200


def test_a_trace_among_majors_is_balanced_to_its_own_size():
    result = dosewright.equilibrate(
        {"Na+": 0.3, "Cl-": 0.3, "Cu+2": 1e-12, "SO4-2": 1e-12, "NH4+": 0.05, "CO3-2": 0.02},
    )
    dissolved = result.dissolved["Cu+2"] + result.solids["Cu(OH)2(s)"]
    assert dissolved == pytest.approx(1e-12, rel=1e-9)
    assert result.certificate.balance_residual <= 1e-9


def test_single_and_batch_agree():
    totals = {"Ca+2": [0.01, 0.03], "SO4-2": [0.02, 0.03], "Na+": [0.02, 0.0]}
    batch = dosewright.equilibrate_batch(totals)
    for row in range(2):
        one = dosewright.equilibrate({name: values[row] for name, values in totals.items()})
        assert batch.pH[row] == pytest.approx(one.pH, abs=1e-10)
        gypsum = batch.solids[row, batch.solid_names.index("gypsum")]
        assert gypsum == pytest.approx(one.solids["gypsum"], rel=1e-9, abs=1e-15)


def test_fixed_pH_is_met_and_the_protons_are_free():
    result = dosewright.equilibrate({"Zn+2": 0.01, "Cl-": 0.02}, fix={"pH": 9.0})
    assert result.pH == pytest.approx(9.0, abs=1e-12)
    assert result.solids["Zn(OH)2(s)"] + result.solids["Zn(OH)2(am)"] > 0.009


def test_a_held_gas_sets_its_own_activity_and_reports_what_it_gave():
    result = dosewright.equilibrate({"Na+": 0.01}, fix={"CO2(g)": 0.01})
    open_again = dosewright.equilibrate(
        {"Na+": 0.01, "CO3-2": result.dissolved["CO3-2"]}, solids=[]
    )
    assert open_again.pH == pytest.approx(result.pH, abs=1e-9)
    assert result.gases["CO2(g)"] == pytest.approx(-result.dissolved["CO3-2"], rel=1e-9)


@pytest.mark.parametrize(
    ("totals", "options", "word"),
    [
        ({"Unobtainium+2": 1.0}, {}, "Unobtainium"),
        ({"Na+": -1.0}, {}, "negative"),
        ({"Na+": float("nan")}, {}, "finite"),
        ({"Na+": 1.0}, {"solids": ["kryptonite"]}, "kryptonite"),
        ({"Na+": 1.0}, {"solids": "some"}, "some"),
        ({"Na+": 1.0}, {"activity": "magic"}, "magic"),
        ({"Na+": 1.0}, {"temperature_C": 400.0}, "400"),
        ({"Na+": 1.0}, {"fix": {"pOH": 3.0}}, "pOH"),
        ({"Na+": 1.0}, {"fix": {"CO2(g)": 0.0}}, "CO2"),
    ],
)
def test_bad_requests_are_refused_by_name(totals, options, word):
    with pytest.raises(DosewrightError, match=word):
        dosewright.equilibrate(totals, **options)


amounts = st.floats(min_value=-6.0, max_value=-0.5).map(lambda e: 10.0**e)
liquors = st.fixed_dictionaries(
    {},
    optional=dict.fromkeys(
        ("Ca+2", "Mg+2", "Fe+3", "Al+3", "Cu+2", "Zn+2", "NH4+", "SO4-2", "CO3-2"), amounts
    ),
)


def closed(totals, acid):
    """Close the charge with Na+ or Cl- around a given strong acid (negative: strong base)."""
    data = dosewright.catalogue().components
    totals = dict(totals)
    totals["H+"] = acid
    charge = sum(data[name].charge * mol for name, mol in totals.items())
    other = "Cl-" if charge > 0 else "Na+"
    totals[other] = totals.get(other, 0.0) + abs(charge)
    return totals


@settings(max_examples=60, deadline=None)
@given(liquor=liquors, acid=st.floats(min_value=-0.3, max_value=0.3))
def test_equilibrating_an_equilibrium_changes_nothing(liquor, acid):
    totals = closed(liquor, acid)
    first = dosewright.equilibrate(totals, activity="ideal")
    again = dosewright.equilibrate(
        {name: value for name, value in first.dissolved.items() if value != 0.0 or name == "H+"},
        activity="ideal",
    )
    assert again.pH == pytest.approx(first.pH, abs=1e-6)
    assert sum(again.solids.values()) <= 1e-9
    for name, value in first.dissolved.items():
        if name != "H+":
            assert again.dissolved[name] == pytest.approx(value, rel=1e-6, abs=1e-15)


@settings(max_examples=60, deadline=None)
@given(liquor=liquors, acid=st.floats(min_value=-0.3, max_value=0.3))
def test_mass_and_charge_close(liquor, acid):
    totals = closed(liquor, acid)
    result = dosewright.equilibrate(totals, activity="ideal")
    solids = dosewright.catalogue().solids
    for name, given_mol in totals.items():
        if name == "H+":
            continue
        held = sum(mol * solids[s].components.get(name, 0.0) for s, mol in result.solids.items())
        assert held + result.dissolved[name] == pytest.approx(given_mol, rel=1e-9)
    species = dosewright.catalogue().species
    charge = sum(mol * species[name].charge for name, mol in result.species.items())
    assert abs(charge) <= 1e-9
