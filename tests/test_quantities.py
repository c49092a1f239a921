"""Text with units to numbers."""

import pytest

from dosewright.flowsheet import find_label, from_document
from dosewright.quantities import QuantityError, parse, parse_concentration


@pytest.mark.parametrize(
    ("text", "kind", "value"),
    [
        ("120 m3/h", "flow", 120.0),
        ("2880 m3/d", "flow", 120.0),
        ("33.3333333333333333 L/s", "flow", 120.0),
        ("2000 L/min", "flow", 120.0),
        ("2.88 ML/d", "flow", 120.0),
        ("100 gpm", "flow", 22.712470704),  # US gallon 3.785411784 L (exact)
        ("8400 h/yr", "operating_time", 8400.0),
        ("350 d/yr", "operating_time", 8400.0),
        ("25 degC", "temperature", 25.0),
        ("298.15 K", "temperature", 25.0),
        ("77 degF", "temperature", 25.0),
        ("190 USD/t", "price_per_mass", 190.0),
        ("0.19 USD/kg", "price_per_mass", 190.0),
        ("100 USD/short_ton", "price_per_mass", 110.231131),  # 907.18474 kg (exact)
        ("0.80 USD/m3", "price_per_volume", 0.8),
        ("92 %", "fraction", 0.92),
        ("0.92 fraction", "fraction", 0.92),
        ("1 bar", "pressure", 0.986923),
        ("101.325 kPa", "pressure", 1.0),
        ("1.2 g/L", "dose", 1.2),
        ("3.36 t/d", "mass_flow", 140.0),
        ("1,200 mg/L", "mass_concentration", 1200.0),
        ("1,234,567.5 ug/L", "mass_concentration", 1234.5675),
        ("1 200 mg/L", "mass_concentration", 1200.0),
        ("1.2e3 mg/L", "mass_concentration", 1200.0),
        (".5e1 mg/L", "mass_concentration", 5.0),
        ("12 m³/h", "flow", 12.0),
        ("25 °C", "temperature", 25.0),
        ("500 mL", "volume", 0.5),
    ],
)
def test_quantity_is_read(text, kind, value):
    assert parse(text, kind) == pytest.approx(value, rel=1e-6)


@pytest.mark.parametrize(
    ("text", "kind", "word"),
    [
        ("120", "flow", "no unit"),
        (120, "flow", "no unit"),
        ("120 kg/h", "flow", "dimension"),
        ("120 flurbs", "flow", "not known"),
        ("-3 m3/h", "flow", "negative"),
        ("lots", "flow", "number"),
        ("nan m3/h", "flow", "number"),
        ("1e999 m3/h", "flow", "finite"),
        ("120 %", "fraction", "above"),
        ("0.5", "fraction", "%"),
        ("9000 h/yr", "operating_time", "above"),
        ("400 degC", "temperature", "above"),
        ("5 USD", "price_per_mass", "dimension"),
        ("1,5 mg/L", "mass_concentration", "thousands"),  # a decimal comma is not 15
        ("0,500 mg/L", "mass_concentration", "thousands"),
        ("1.200,5 mg/L", "mass_concentration", "thousands"),
        ("5 10 mg/L", "mass_concentration", "not known"),  # nor two numbers 510
        ("10-20 mg/L", "mass_concentration", "not known"),
        ("100 %", "operating_time", "dimension"),  # hours a year have no dimension either
        ("0 h/yr", "operating_time", "below"),
    ],
)
def test_bad_quantity_says_why_and_gives_an_example(text, kind, word):
    with pytest.raises(QuantityError, match=word) as error:
        parse(text, kind)
    assert "write for example" in str(error.value)


@pytest.mark.parametrize("unit", ["USD/ton", "USD/tons"])
def test_a_ton_is_asked_which(unit):
    with pytest.raises(QuantityError, match="write t or short_ton"):
        parse(f"190 {unit}", "price_per_mass")


def assay(rows, **feed):
    document = {
        "title": "t",
        "feed": {"flow": "1 m3/h", "pH": 7.0, "closing_ion": "Cl", "assay": rows} | feed,
        "effluent": {},
    }
    return from_document(document, "t").feed.assay_mol_per_L


EQUAL = [
    # the same amount in other words: molar masses of IUPAC weights
    ({"Ca": "400.78 mg/L"}, {"Ca": "0.40078 g/L"}),
    ({"Ca": "400.78 mg/L"}, {"Ca": "10 mmol/L"}),
    ({"Ca": "400.78 mg/L"}, {"Ca": "20 meq/L"}),
    ({"Ca": "400.78 mg/L"}, {"Ca": "0.01 mol/L"}),
    ({"Ca": "400.78 mg/L"}, {"Ca": "10 mol/m3"}),
    ({"Ca": "400.78 mg/L"}, {"Ca": "1000.86 mg/L as CaCO3"}),
    ({"NH4": "18.039 mg/L"}, {"NH4": "14.007 mg/L as N"}),
    ({"NH4": "18.039 mg/L"}, {"NH4": "17.031 mg/L as NH3"}),
    ({"SO4": "96.056 mg/L"}, {"SO4": "32.06 mg/L as S"}),
    ({"HS": "33.068 mg/L"}, {"HS": "32.06 mg/L as S"}),
    ({"CO3": "60.008 mg/L"}, {"CO3": "100.086 mg/L as CaCO3"}),
    ({"Zn": "310 mg/L"}, {"Zn": "310000 ug/L"}),
    ({"Al": "26.982 mg/L"}, {"Al": "0.003 N"}),
    ({"Na": "22.99 mg/L"}, {"Na": "1 mmol/L"}),
    ({"Na": "2 mmol/L"}, {"Na": "100.086 mg/L as CaCO3"}),
]


@pytest.mark.parametrize(("one", "other"), EQUAL)
def test_an_amount_is_the_same_in_any_unit(one, other):
    first, second = assay(one), assay(other)
    for component, mol in first.items():
        assert second[component] == pytest.approx(mol, rel=1e-12)


def test_ppm_needs_and_uses_the_specific_gravity():
    plain = assay({"Zn": "310 mg/L"})
    dense = assay({"Zn": "250 ppm"}, specific_gravity=1.24)
    assert dense["Zn+2"] == pytest.approx(plain["Zn+2"], rel=1e-12)


def test_iron_label_counts_both_oxidation_states():
    label = find_label("Fe")
    assert label is not None
    assert set(label.components) == {"Fe+2", "Fe+3"}


def test_concentration_refuses_what_has_no_charge():
    for text in ("3 meq/L", "0.1 N"):
        with pytest.raises(QuantityError, match="charge"):
            parse_concentration(text, 0, "NaCl")
