"""Each caution has a case in which it fires and one in which it does not."""

import numpy as np
import pytest

import dosewright
from dosewright.cautions import DISCLAIMER, cautions_of, headspace_ppm
from dosewright.flowsheet import from_document, with_value
from dosewright.plant import PlantModel, simulate
from dosewright.trial import orders_of

CORVANE = dosewright.load("flowsheets/corvane_adit.toml")
TESSALY = dosewright.load("flowsheets/tessaly_row.toml")


def run_of(flowsheet, *stages):
    model = PlantModel.of(flowsheet)
    orders, _ = orders_of(model, {"stages": list(stages)})
    run = simulate(model, orders)
    assert run.ok.all()
    return run


def stage(oxidant=None, **reagents):
    doses = {
        name.replace("_", " "): {"pH": v[1]} if isinstance(v, tuple) else {"dose_kg_per_m3": v}
        for name, v in reagents.items()
    }
    return {"reagents": doses, "oxidant": oxidant}


def found(flowsheet, *stages):
    return {(c.hazard, c.level) for c in cautions_of(run_of(flowsheet, *stages))}


def pH(value):
    return (None, value)


def test_hydrogen_sulfide_stops_on_an_overdose_in_acid_liquor():
    assert ("H2S", "stop") in found(TESSALY, stage(sodium_hydrosulfide=0.35))


def test_hydrogen_sulfide_is_quiet_on_a_short_dose_in_alkaline_liquor():
    run = run_of(TESSALY, stage(caustic=pH(8.6)), stage(sodium_hydrosulfide=0.05))
    assert not [c for c in cautions_of(run) if c.hazard == "H2S"]


def test_sulfide_below_pH_8_is_warned_of_even_when_little_gas_is_computed():
    assert ("H2S", "warn") in found(
        TESSALY, stage(caustic=pH(7.5)), stage(sodium_hydrosulfide=0.05)
    )


def test_acid_after_sulfide_stops():
    trains = [stage(caustic=pH(8.6)), stage(sodium_hydrosulfide=0.05), stage(sulfuric_acid=0.01)]
    assert ("H2S", "stop") in found(TESSALY, *trains)
    assert ("H2S", "stop") not in found(TESSALY, trains[0], trains[1])


def test_headspace_of_known_sulfide():
    # Henry constant 0.10 mol/(L atm): 0.34 mg/L H2S(aq) is 100 ppm (memory)
    run = run_of(TESSALY, stage(sodium_hydrosulfide=0.30))
    states = run.stages[0].states
    mg = states.molality[0, states.system.species.index("H2S")] * 34081.0
    assert headspace_ppm(run.stages[0], "H2S(g)") == pytest.approx(100.0 * mg / 0.34, rel=0.05)


def test_ammonia_warns_at_high_pH_and_is_quiet_at_low():
    # 26 mg/L NH3 is 25 ppm (memory); 450 mg/L NH4 at pH 10 gives some 340 ppm
    levels = found(TESSALY, stage(caustic=pH(10.0)))
    assert ("NH3", "warn") in levels or ("NH3", "stop") in levels
    assert not {x for x in found(TESSALY, stage(caustic=pH(7.0))) if x[0] == "NH3"}


def test_ammonia_headspace_of_the_rinse_at_pH_10():
    # 26 mg/L NH3 is 25 ppm with 60 mol/(L atm); sources give 57 to 62 (memory)
    run = run_of(TESSALY, stage(caustic=pH(10.0)))
    states = run.stages[0].states
    mg = states.molality[0, states.system.species.index("NH3")] * 17031.0
    assert headspace_ppm(run.stages[0], "NH3(g)") == pytest.approx(mg / 26.0 * 25.0, rel=0.1)


def test_carbon_dioxide_foams_with_limestone_and_not_with_lime():
    assert ("CO2", "warn") in found(CORVANE, stage("peroxide", limestone=pH(5.9)))
    assert not {x for x in found(CORVANE, stage(hydrated_lime=pH(5.9))) if x[0] == "CO2"}


def test_heat_of_neutralising_strong_acid():
    document = {
        "title": "acid",
        "effluent": {},
        "feed": {
            "flow": "1 m3/h",
            "pH": 0.1,
            "closing_ion": "SO4",
            "accept_charge_error": True,
            "assay": {"SO4": "90 g/L"},
        },
        "reagents": {
            "caustic": {
                "formula": "NaOH",
                "supply": "solution",
                "strength": "50 %",
                "price": "300 USD/t",
            }
        },
    }
    levels = {h for h, _ in found(from_document(document, "t"), stage(caustic=150.0))}
    assert "heat" in levels
    assert "heat" not in {h for h, _ in found(CORVANE, stage(caustic=0.5))}


def test_gypsum_scales_with_lime_and_not_with_caustic_in_soft_liquor():
    assert ("scale", "note") in found(CORVANE, stage(hydrated_lime=pH(9.0)))
    soft = with_value(CORVANE, "feed.assay.Ca", "1 mg/L")
    soft = with_value(soft, "feed.assay.SO4", "2900 mg/L")
    assert not {x for x in found(soft, stage(caustic=pH(6.0))) if x[0] == "scale"}


def test_peroxide_warns_only_where_it_is_dosed():
    assert ("H2O2", "warn") in found(CORVANE, stage("peroxide", caustic=pH(6.0)))
    assert ("H2O2", "warn") not in found(CORVANE, stage("air", caustic=pH(6.0)))


def test_corrosive_solutions_are_noted():
    assert ("corrosive", "note") in found(CORVANE, stage(caustic=pH(6.0)))
    assert ("corrosive", "note") not in found(CORVANE, stage(hydrated_lime=pH(6.0)))


def test_gravest_come_first_and_defer_to_those_who_may_decide():
    levels = [c.level for c in cautions_of(run_of(TESSALY, stage(sodium_hydrosulfide=0.35)))]
    order = {"stop": 0, "warn": 1, "note": 2}
    assert levels == sorted(levels, key=order.get)
    assert "not a safety assessment" in DISCLAIMER
    assert "licensed" in DISCLAIMER
    assert np.isfinite([c.value for c in cautions_of(run_of(CORVANE, stage(caustic=1.0)))]).all()
