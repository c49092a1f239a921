"""The shipped constants: every reaction balances, every row says where it comes from."""

import pytest

from dosewright.chemistry import catalogue
from dosewright.chemistry.formula import (
    ATOMIC_WEIGHT,
    charge_of,
    elements_of,
    molar_mass_g_per_mol,
)

DATA = catalogue()
REACTIONS = [*DATA.species.values(), *DATA.solids.values(), *DATA.gases.values()]


@pytest.mark.parametrize("record", REACTIONS, ids=lambda r: r.name)
def test_reaction_balances_in_elements_and_charge(record):
    elements = {"H": 2.0 * record.water, "O": record.water}
    charge = 0.0
    for component, count in record.components.items():
        charge += count * charge_of(component)
        for element, n in elements_of(component).items():
            elements[element] = elements.get(element, 0.0) + count * n
    own = elements_of(record.formula)
    for element in {*elements, *own}:
        assert elements.get(element, 0.0) == pytest.approx(own.get(element, 0.0), abs=1e-12)
    assert charge == pytest.approx(record.charge, abs=1e-12)


@pytest.mark.parametrize("record", REACTIONS, ids=lambda r: r.name)
def test_row_names_its_source_and_says_whether_it_was_read(record):
    assert record.source
    assert record.provenance in {"read", "memory", "exact"}
    assert record.uncertainty_log10 is not None


def test_components_carry_the_charge_of_their_name():
    for name, component in DATA.components.items():
        assert component.charge == charge_of(name)


def test_issue_components_are_there():
    wanted = "H+ Na+ Ca+2 Mg+2 Mn+2 Fe+2 Fe+3 Al+3 Cu+2 Ni+2 Zn+2 NH4+ HS- Cl- SO4-2 CO3-2"
    assert set(wanted.split()) <= set(DATA.components)


def test_solids_know_their_family_and_pace():
    for solid in DATA.solids.values():
        assert solid.family in {"hydroxide", "basic_salt", "carbonate", "sulfide", "sulfate"}
        assert solid.forms in {"fast", "slow"}
        assert 1.0 < solid.density_g_per_cm3 < 8.0


def test_slow_minerals_are_off_by_default():
    # common practice, no source: these do not form in the minutes of a mixing tank
    for name in ("goethite", "hematite", "dolomite", "gibbsite", "Ni(OH)2(aged)"):
        assert DATA.solids[name].forms == "slow"


@pytest.mark.parametrize(
    ("temperature_C", "pKw"), [(0.0, 14.943), (10.0, 14.534), (40.0, 13.535), (60.0, 13.017)]
)
def test_water_constant_follows_the_published_table(temperature_C, pKw):
    # Harned and Owen 1958, The Physical Chemistry of Electrolytic Solutions (memory)
    assert -DATA.log10_K_at(DATA.species["OH-"], temperature_C) == pytest.approx(pKw, abs=0.003)


def plummer_busenberg(kelvin, a, b, c, d, e):
    import math

    return a + b * kelvin + c / kelvin + d * math.log10(kelvin) + e / kelvin**2


@pytest.mark.parametrize("temperature_C", [0.0, 10.0, 25.0, 40.0, 60.0])
def test_carbonate_constants_follow_their_published_functions(temperature_C):
    # Plummer and Busenberg 1982, Geochim. Cosmochim. Acta 46, 1011 (coefficients from memory)
    kelvin = temperature_C + 273.15
    K1 = plummer_busenberg(kelvin, -356.3094, -0.06091964, 21834.37, 126.8339, -1684915.0)
    K2 = plummer_busenberg(kelvin, -107.8871, -0.03252849, 5151.79, 38.92561, -563713.9)
    KH = plummer_busenberg(kelvin, 108.3865, 0.01985076, -6919.53, -40.45154, 669365.0)
    calcite = plummer_busenberg(kelvin, -171.9065, -0.077993, 2839.319, 71.595, 0.0)
    at = DATA.log10_K_at
    assert at(DATA.species["HCO3-"], temperature_C) == pytest.approx(-K2, abs=0.005)
    assert at(DATA.species["CO2"], temperature_C) == pytest.approx(-K1 - K2, abs=0.006)
    assert at(DATA.gases["CO2(g)"], temperature_C) == pytest.approx(KH + K1 + K2, abs=0.006)
    assert at(DATA.solids["calcite"], temperature_C) == pytest.approx(calcite, abs=0.006)


@pytest.mark.parametrize(
    ("formula", "elements"),
    [
        ("Zn4(OH)6SO4:4H2O", {"Zn": 4, "O": 14, "H": 14, "S": 1}),
        ("Cu(NH3)4+2", {"Cu": 1, "N": 4, "H": 12}),
        ("Al2(SO4)3:14H2O", {"Al": 2, "S": 3, "O": 26, "H": 28}),
        ("Fe(OH)3(am)", {"Fe": 1, "O": 3, "H": 3}),
    ],
)
def test_formula_is_counted(formula, elements):
    assert elements_of(formula) == elements


@pytest.mark.parametrize("formula", ["Ca(", "Ca)OH", "Xx2O", "ca", "H2O)", ":H2O", "Ca+OH"])
def test_what_is_no_formula_is_refused_with_its_position(formula):
    with pytest.raises(ValueError, match="formula"):
        elements_of(formula)


def test_molar_masses_against_the_handbook():
    # CRC Handbook of Chemistry and Physics (memory)
    for formula, mass in {
        "Ca(OH)2": 74.09, "CaSO4:2H2O": 172.17, "Fe(OH)3": 106.87, "CaCO3": 100.09, "NaOH": 40.00,
    }.items():  # fmt: skip
        assert molar_mass_g_per_mol(formula) == pytest.approx(mass, abs=0.01)
    assert min(ATOMIC_WEIGHT.values()) == ATOMIC_WEIGHT["H"]


STOICHIOMETRY = [
    # mass of one per mass of the other: stoichiometry (exact); rounded factors 0.74, 1.06, 0.40,
    # 0.80 of Skousen and others 1991-2000 (read), alum 9.6 per P (textbook)
    ("Ca(OH)2", 1.0, "CaCO3", 1.0, 0.7403),
    ("Na2CO3", 1.0, "CaCO3", 1.0, 1.059),
    ("MgO", 1.0, "CaCO3", 1.0, 0.4027),
    ("NaOH", 2.0, "CaCO3", 1.0, 0.7993),
    ("CaCO3", 1.0, "H2SO4", 1.0, 1.0205),
    ("Fe(OH)3", 1.0, "Fe", 1.0, 1.914),
    ("Cr(OH)3", 1.0, "Cr", 1.0, 1.981),
    ("CaF2", 1.0, "F", 2.0, 2.055),
    ("Al(OH)3", 1.0, "Al", 1.0, 2.891),
    ("Al2(SO4)3:14H2O", 1.0, "P", 2.0, 9.594),
    ("Ca(OH)2", 3.0, "Cr", 2.0, 2.137),
]


@pytest.mark.parametrize(("a", "count_a", "b", "count_b", "ratio"), STOICHIOMETRY)
def test_mass_ratios_of_the_trade(a, count_a, b, count_b, ratio):
    computed = count_a * molar_mass_g_per_mol(a) / (count_b * molar_mass_g_per_mol(b))
    assert computed == pytest.approx(ratio, rel=0.003)


def test_fingerprint_is_stable_within_a_version():
    assert catalogue().fingerprint == DATA.fingerprint
    assert len(DATA.fingerprint) == 64
