"""The shipped constants: every reaction balances, every row says where it comes from."""

import importlib
from importlib import resources

import pytest

from dosewright.chemistry import catalogue
from dosewright.chemistry.formula import (
    ATOMIC_WEIGHT,
    charge_of,
    elements_of,
    molar_mass_g_per_mol,
)

# the package exports a function of the same name as the module
catalogue_module = importlib.import_module("dosewright.chemistry.catalogue")

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


def dH(record):
    return record.dH_kJ_per_mol


PROTONIC = [
    record
    for record in [*DATA.species.values(), *DATA.solids.values(), *DATA.gases.values()]
    if record.components.get("H+", 0.0) != 0.0 and getattr(record, "forms", "fast") == "fast"
]


@pytest.mark.parametrize("record", PROTONIC, ids=lambda r: r.name)
def test_reactions_with_protons_carry_an_enthalpy(record):
    # water's own constant moves 0.33 per 10 K: a proton reaction held constant in T would make
    # residuals wrong a hundredfold between 5 and 60 C
    assert dH(record) is not None


@pytest.mark.parametrize(
    ("solid", "neutral"),
    [
        ("Zn(OH)2(s)", "Zn(OH)2"),
        ("Cu(OH)2(s)", "Cu(OH)2"),
        ("Ni(OH)2(fresh)", "Ni(OH)2"),
        ("Fe(OH)2(s)", "Fe(OH)2"),
        ("Al(OH)3(am)", "Al(OH)3"),
        ("Fe(OH)3(am)", "Fe(OH)3"),
    ],
)
def test_neutral_hydroxide_floor_moves_little_with_temperature(solid, neutral):
    # dissolving without a change of charge takes up some heat: 0 to 80 kJ/mol
    floor = dH(DATA.solids[solid]) + dH(DATA.species[neutral])
    assert 0.0 < floor < 80.0


@pytest.mark.parametrize(
    ("name", "bound", "kJ_per_mol"),
    [("Cu(NH3)4+2", 4, -92.0), ("Ni(NH3)6+2", 6, -97.0), ("Zn(NH3)4+2", 4, -60.0)],
)
def test_heat_of_binding_ammonia(name, bound, kJ_per_mol):
    # Smith and Martell, Critical Stability Constants 4 (memory)
    heat = dH(DATA.species[name]) - bound * dH(DATA.species["NH3"])
    assert heat == pytest.approx(kJ_per_mol, abs=5.0)


def test_basic_zinc_sulfate_keeps_its_place_beside_the_hydroxide():
    # Zn4(OH)6SO4:4H2O + 2 OH- = 4 Zn(OH)2 + SO4-2 + 4 H2O: no proton, little heat, so the sulfate
    # at which one turns into the other moves by less than a decade between 10 and 40 C
    def exchange(temperature_C):
        at = DATA.log10_K_at
        return (
            at(DATA.solids["Zn4(OH)6SO4:4H2O(s)"], temperature_C)
            - 4.0 * at(DATA.solids["Zn(OH)2(s)"], temperature_C)
            - 2.0 * at(DATA.species["OH-"], temperature_C)
        )

    assert abs(exchange(40.0) - exchange(10.0)) < 1.0


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


def test_decimal_water_of_crystallisation_is_counted():
    assert elements_of("NiCO3:5.5H2O") == {"Ni": 1, "C": 1, "O": 8.5, "H": 11}


@pytest.mark.parametrize(
    "formula",
    ["Ca(", "Ca)OH", "Xx2O", "ca", "H2O)", ":H2O", "Ca+OH", "FeSO4.7H2O", "Ca()2", "Fe0", ""],
)
def test_what_is_no_formula_is_refused_with_its_position(formula):
    with pytest.raises(ValueError, match="formula"):
        elements_of(formula)


def test_dot_before_water_is_refused_with_its_remedy():
    with pytest.raises(ValueError, match="write ':' before water"):
        elements_of("FeSO4.7H2O")


def test_charge_is_read_past_a_phase():
    assert [charge_of(name) for name in ("SO4-2(aq)", "Fe(OH)4-", "Ca+2", "CuS(ppt)")] == [
        -2, -1, 2, 0,
    ]  # fmt: skip


@pytest.mark.parametrize(
    ("table", "line", "message"),
    [
        ("solids.tsv", None, "solids.tsv.*'NiS\\(aged\\)' stands in line"),
        ("species.tsv", "XCl\tX+ + Cl- = XCl\t1.0\t\t\t0.1\tnone\tmemory\t", "species.tsv, row"),
        (
            "gases.tsv",
            "CO2(q)\tCO2\tCO2(q) + H2O = CO3-2 + 2 H+\tmuch\t\t\t\t\t\t",
            "gases.tsv, row",
        ),
    ],
)
def test_a_bad_row_is_refused_with_table_and_row(monkeypatch, tmp_path, table, line, message):
    shipped = resources.files("dosewright.chemistry").joinpath("tables")
    (tmp_path / "tables").mkdir()
    for name in ("components.tsv", "species.tsv", "solids.tsv", "gases.tsv"):
        text = shipped.joinpath(name).read_text("utf-8")
        if name == table:
            again = (
                next(row for row in text.splitlines() if row.startswith("NiS(aged)"))
                if (line is None)
                else line
            )
            text += again + "\n"
        (tmp_path / "tables" / name).write_text(text, "utf-8")
    monkeypatch.setattr(catalogue_module.resources, "files", lambda _package: tmp_path)
    with pytest.raises(catalogue_module.TableError, match=message):
        catalogue_module.catalogue.__wrapped__()


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
