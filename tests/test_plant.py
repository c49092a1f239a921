"""The plant model: closure, settler and cake arithmetic, oxidation, pH setpoints."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import dosewright
from dosewright.chemistry.formula import molar_mass_g_per_mol
from dosewright.flowsheet import from_document, train_graph, with_value
from dosewright.plant import Orders, PlantModel, simulate

CORVANE = dosewright.load("flowsheets/corvane_adit.toml")
TESSALY = dosewright.load("flowsheets/tessaly_row.toml")


def evaluate(flowsheet, *stages):
    return dosewright.evaluate(flowsheet, {"stages": list(stages)})


def stage(cake="waste", oxidant=None, **reagents):
    doses = {
        name.replace("_", " "): {"pH": v[1]} if isinstance(v, tuple) else {"dose_kg_per_m3": v}
        for name, v in reagents.items()
    }
    return {"reagents": doses, "oxidant": oxidant, "cake": cake}


TRAINS = [
    (CORVANE, [stage(limestone=2.8, oxidant="air"), stage("zinc cake", caustic=0.9)]),
    (
        CORVANE,
        [stage(hydrated_lime=1.0, oxidant="peroxide"), stage(magnesia=0.3), stage(caustic=0.2)],
    ),
    (TESSALY, [stage(caustic=0.2), stage("sulfide cake", sodium_hydrosulfide=0.2)]),
    (TESSALY, [stage(soda_ash=1.0, hydrated_lime=0.3), stage(sulfuric_acid=0.1)]),
]


@pytest.mark.parametrize(("flowsheet", "stages"), TRAINS)
def test_elements_charge_and_water_close_over_the_whole_train(flowsheet, stages):
    trial = evaluate(flowsheet, *stages)
    assert trial.balance
    for name, gap in trial.balance.items():
        assert abs(gap) <= 1e-9, name


@pytest.mark.parametrize(("flowsheet", "stages"), TRAINS)
def test_cost_lines_add_up_to_the_objective(flowsheet, stages):
    trial = evaluate(flowsheet, *stages)
    assert sum(line.USD_per_h for line in trial.costs) == pytest.approx(
        trial.cost_per_hour, rel=1e-12
    )


@settings(max_examples=25, deadline=None)
@given(
    doses=st.lists(
        st.tuples(st.sampled_from(list(CORVANE.reagents)), st.floats(0.0, 4.0)),
        min_size=1, max_size=3,
    ),
    agent=st.sampled_from([None, "air", "peroxide"]),
)  # fmt: skip
def test_any_train_closes(doses, agent):
    stages = [
        {"reagents": {name: {"dose_kg_per_m3": dose}}, "oxidant": agent if k == 0 else None}
        for k, (name, dose) in enumerate(doses)
    ]
    trial = evaluate(CORVANE, *stages)
    assert max(abs(v) for v in trial.balance.values()) <= 1e-9
    for row in trial.streams:
        assert row.liquor_m3_per_h >= 0.0
        assert row.dry_solids_kg_per_h >= 0.0


def test_stream_table_closes_stage_by_stage():
    trial = evaluate(*TRAINS[0][:1], *TRAINS[0][1])
    rows = {row.name: row for row in trial.streams}
    pulp, cake, over = rows["pulp 1"], rows["cake 1, waste"], rows["overflow 1"]
    for component, mol in pulp.total_mol_per_h.items():
        parts = cake.total_mol_per_h.get(component, 0.0) + over.total_mol_per_h.get(component, 0.0)
        assert parts == pytest.approx(mol, rel=1e-9, abs=1e-9)
    assert cake.water_kg_per_h + over.water_kg_per_h == pytest.approx(
        pulp.water_kg_per_h, rel=1e-12
    )


def test_feed_closes_on_its_declared_ion():
    # collector's own closure of the same assay: SO4 3400 -> about 3270 mg/L (derived)
    closure = PlantModel.of(CORVANE).closure
    assert closure.component == "SO4-2"
    mg = closure.used_mol_per_L * molar_mass_g_per_mol("SO4") * 1000.0
    assert mg == pytest.approx(3270.0, rel=0.01)
    states = PlantModel.of(CORVANE).feed_states
    assert states.pH[0] == pytest.approx(2.9, abs=1e-12)
    charge = float((states.molality @ states.system.charge)[0])
    assert abs(charge) <= 1e-10


def test_cake_moisture_is_water_over_wet_mass():
    trial = evaluate(CORVANE, stage(caustic=1.8))
    cake = trial.stages[0]
    water = next(r.water_kg_per_h for r in trial.streams if r.kind == "cake")
    moisture = water / cake.cake_wet_kg_per_h
    families = {"hydroxide": 0.60, "basic_salt": 0.55, "carbonate": 0.40, "sulfate": 0.40}
    mean = sum(
        kg / (1.0 - (x := families[dosewright.catalogue().solids[s].family])) * x
        for s, kg in cake.solids_kg_per_h.items()
    ) / sum(cake.solids_kg_per_h.values())
    assert moisture == pytest.approx(mean / (1.0 + mean), rel=1e-6)


def test_fines_carry_the_stated_solids_over():
    trial = evaluate(CORVANE, stage(caustic=1.8))
    over = next(r for r in trial.streams if r.name == "effluent")
    tss = over.dry_solids_kg_per_h / over.liquor_m3_per_h * 1000.0  # mg/L
    assert tss == pytest.approx(15.0, rel=1e-3)


def test_total_limit_counts_the_metal_in_the_fines():
    # mass balance: total = dissolved + TSS x metal fraction of the fines (exact)
    flowsheet = with_value(
        CORVANE, "effluent", {"total": {"Zn": "1 mg/L"}, "dissolved": {"Zn": "1 mg/L"}}
    )
    trial = evaluate(flowsheet, stage(caustic=1.8))
    dissolved, total = (
        next(x.value for x in trial.limits if x.name == f"Zn, {kind}")
        for kind in ("dissolved", "total")
    )
    over = next(r for r in trial.streams if r.name == "effluent")
    zinc = sum(
        kg * dosewright.catalogue().solids[s].elements.get("Zn", 0.0) * molar_mass_g_per_mol("Zn")
        / dosewright.catalogue().solids[s].molar_mass_g_per_mol
        for s, kg in over.solids_kg_per_h.items()
    )  # fmt: skip
    assert total == pytest.approx(dissolved + zinc / over.liquor_m3_per_h * 1000.0, rel=1e-9)


def test_pure_hydroxide_cake_has_the_grade_of_its_formula():
    # 52.2 % Zn in a caustic cake of the mine water, 65.8 % in Zn(OH)2 itself (stoichiometry)
    document = {
        "title": "zinc", "effluent": {},
        "feed": {"flow": "1 m3/h", "pH": 4.0, "closing_ion": "SO4",
                 "assay": {"Zn": "654 mg/L", "SO4": "960 mg/L"}},
        "plant": {"cake_moisture": {"hydroxide": "0 %", "basic_salt": "0 %"}},
        "reagents": {"caustic": {"formula": "NaOH", "supply": "solution", "strength": "50 %",
                                 "price": "300 USD/t"}},
        "products": [{"name": "cake", "metals": ["Zn"], "min_grade": "1 %"}],
        "solids": {"forbid": ["Zn4(OH)6SO4:4H2O(s)"]},
    }  # fmt: skip
    trial = evaluate(from_document(document, "t"), stage("cake", caustic=(None, 9.0)))
    grade = next(x.value for x in trial.limits if x.name.startswith("grade"))
    expected = 100.0 * molar_mass_g_per_mol("Zn") / molar_mass_g_per_mol("Zn(OH)2")
    assert grade == pytest.approx(expected, rel=1e-9)


def test_oxidant_converts_its_share_and_peroxide_is_bought_for_it():
    trial = evaluate(CORVANE, stage(caustic=(None, 6.0), oxidant="peroxide"))
    iron = 0.290 * 120_000 / molar_mass_g_per_mol("Fe")  # mol/h of Fe(II) fed
    assert trial.stages[0].oxidised_mol_per_h == pytest.approx(0.98 * iron, rel=1e-9)
    needed = 0.98 * iron / 2.0 * molar_mass_g_per_mol("H2O2") / 1000.0 / 0.35 / 0.90
    assert trial.stages[0].oxidant_kg_per_h == pytest.approx(needed, rel=1e-9)


@pytest.mark.parametrize("pH", [4.0, 5.5, 7.0, 8.9, 10.5])
def test_a_pH_setpoint_is_met_and_repeats_as_a_dose(pH):
    trial = evaluate(CORVANE, stage(caustic=(None, pH)))
    assert trial.stages[0].pH == pytest.approx(pH, abs=1e-6)
    again = dosewright.evaluate(CORVANE, trial.decisions)
    assert again.stages[0].pH == pytest.approx(pH, abs=1e-6)
    assert again.cost_per_hour == pytest.approx(trial.cost_per_hour, rel=1e-9)


def test_acid_setpoint_is_met_from_above():
    trial = evaluate(TESSALY, stage(caustic=0.6), stage(sulfuric_acid=(None, 7.0)))
    assert trial.stages[1].pH == pytest.approx(7.0, abs=1e-6)


def test_a_batch_agrees_with_its_rows():
    model = PlantModel.of(CORVANE)
    rng = np.random.default_rng(3)
    dose = rng.uniform(0.0, 300.0, (5, 2, 4))
    oxidant = rng.random((5, 2, 2)) < 0.3
    whole = simulate(model, Orders.of_doses(dose, oxidant))
    for row in range(5):
        one = simulate(model, Orders.of_doses(dose[row : row + 1], oxidant[row : row + 1]))
        for a, b in zip(whole.stages, one.stages, strict=True):
            assert a.states.pH[row] == pytest.approx(b.states.pH[0], abs=1e-9)
            assert a.cake.solids[row] == pytest.approx(b.cake.solids[0], rel=1e-9, abs=1e-12)


def test_lime_spoils_the_zinc_cake_and_caustic_does_not():
    # common practice, no source: lime brings gypsum into the product, about 25 % Zn against 50 %
    grades = {}
    for base in ("hydrated_lime", "caustic"):
        trial = evaluate(
            CORVANE,
            stage(hydrated_lime=(None, 6.0), oxidant="air"),
            stage("zinc cake", **{base: (None, 9.0)}),
        )
        grades[base] = next(x.value for x in trial.limits if x.name.startswith("grade"))
    assert grades["hydrated_lime"] == pytest.approx(25.0, abs=6.0)
    assert grades["caustic"] == pytest.approx(52.0, abs=6.0)


def test_equipment_is_tagged_and_streams_are_numbered_once():
    graph = train_graph(CORVANE, 3, ["waste", "zinc cake", "waste"])
    numbers = [data["stream"] for _, _, data in graph.edges(data=True)]
    assert sorted(numbers) == list(range(1, len(numbers) + 1))
    assert graph.nodes["TK-201"]["unit"] == "mix"
    assert graph.nodes["cake 2"]["unit"] == "product"


def test_a_metal_gone_to_the_last_trace_stays_positive_from_stage_to_stage():
    # all but 1e-15 of the copper is sulfide after stage 1: rounding must not make the rest negative
    trial = evaluate(
        with_value(TESSALY, "plant.max_stages", 4),
        stage(caustic=(None, 8.5)),
        stage(sodium_hydrosulfide=0.3),
        stage(caustic=0.1),
        stage(caustic=0.1),
    )
    for row in trial.streams:
        if row.kind == "liquor":
            assert row.dissolved_mg_per_L["Cu+2"] > 0.0
