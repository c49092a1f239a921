"""Flowsheet files to dataclasses, compounds to components, and the graphs of a train."""

import copy
import tomllib
from pathlib import Path

import networkx as nx
import pytest
from hypothesis import given
from hypothesis import strategies as st

from bad_input_cases import GOOD
from dosewright.chemistry.catalogue import catalogue
from dosewright.chemistry.formula import charge_of, elements_of
from dosewright.errors import Fault, InputError, NoDesign
from dosewright.flowsheet import (
    UNIT_TYPES,
    Flowsheet,
    decompose,
    find_label,
    from_document,
    load,
    train_graph,
    value_at,
    with_value,
)

SHIPPED = Path(__file__).parent.parent / "flowsheets"
FILES = sorted(f for f in SHIPPED.glob("*.toml") if "[[pour]]" not in f.read_text("utf-8"))


@pytest.fixture(scope="module")
def every_key() -> Flowsheet:
    return load(SHIPPED / "every_key.toml")


# ---------------------------------------------------------------------------------------------
# files


@pytest.mark.parametrize("file", FILES, ids=lambda f: f.stem)
def test_shipped_flowsheet_loads_and_owns_up_to_being_invented(file):
    flowsheet = load(file)
    assert "nvented" in flowsheet.notice
    assert flowsheet.decisions is not None
    again = from_document(flowsheet.document, flowsheet.source_name)
    assert again == flowsheet


def test_there_are_three_shipped_flowsheets():
    assert {f.stem for f in FILES} == {"corvane_adit", "tessaly_row", "every_key"}


def test_values_end_in_the_units_their_names_say(every_key):
    feed, plant, lime = every_key.feed, every_key.plant, every_key.reagents["hydrated lime"]
    assert (feed.flow_m3_per_h, feed.hours_per_year, feed.temperature_C) == (12.0, 6000.0, 20.0)
    # 60 ppm x 1.003 kg/L / 65.38 g/mol; 120 mg/L as CaCO3 / 100.086; 8 mg/L as N / 14.007
    assert feed.assay_mol_per_L["Zn+2"] == pytest.approx(60e-3 * 1.003 / 65.38, rel=1e-12)
    assert feed.assay_mol_per_L["Ca+2"] == pytest.approx(0.120 / 100.086, rel=1e-12)
    assert feed.assay_mol_per_L["NH4+"] == pytest.approx(8e-3 / 14.007, rel=1e-12)
    assert feed.assay_mol_per_L["Na+"] == pytest.approx(4.4e-3, rel=1e-12)
    assert feed.closing_component == "SO4-2"
    assert plant.overflow_solids_mg_per_L == 10.0
    assert plant.co2_vent_atm == 0.01
    assert (lime.strength, lime.utilisation, lime.make_up) == (0.92, 0.90, 0.15)
    assert (lime.price_USD_per_t, lime.max_dose_kg_per_m3) == (190.0, 20.0)
    assert every_key.oxidants["peroxide"].price_USD_per_t == 420.0
    assert every_key.oxidants["air"].price_USD_per_m3 == 0.06
    assert every_key.products[0].payable == {"Cu": 0.5}
    assert (every_key.effluent.pH_min, every_key.effluent.pH_max) == (6.0, 9.5)
    assert every_key.decisions == {
        "stages": [
            {"reagents": {"hydrated lime": {"pH": 4.3}}, "oxidant": "peroxide", "cake": "waste"},
            {"reagents": {"caustic": {"pH": 9.0}}, "oxidant": None, "cake": "copper cake"},
        ]
    }


def test_sulfide_limit_as_sulfur_is_kept_as_sulfur():
    spec = {s.label: s for s in load(SHIPPED / "tessaly_row.toml").effluent.dissolved}["HS as S"]
    assert spec.components == {"HS-": 1.0}
    assert spec.g_per_mol == pytest.approx(32.06)
    assert spec.max_mg_per_L == 0.5


@pytest.mark.parametrize(
    ("text", "dose"),
    [
        ("pH 6.0", {"pH": 6.0}),
        ("1.2 kg/m3", {"dose_kg_per_m3": 1.2}),
        ("1200 g/m3", {"dose_kg_per_m3": 1.2}),
        ("140 kg/h", {"dose_kg_per_h": 140.0}),
        ("3.36 t/d", {"dose_kg_per_h": 140.0}),
    ],
)
def test_train_doses(text, dose):
    document = tomllib.loads(GOOD.replace('"pH 9.0"', f'"{text}"'))
    decisions = from_document(document, "x").decisions
    assert decisions is not None
    ((kind, value),) = decisions["stages"][0]["reagents"]["lime"].items()
    assert {kind: pytest.approx(value)} == dose


def test_a_byte_order_mark_and_foreign_line_ends_are_no_fault(tmp_path):
    file = tmp_path / "x.toml"
    file.write_bytes(b"\xef\xbb\xbf" + GOOD.replace("\n", "\r\n").encode())
    assert load(file).document == tomllib.loads(GOOD)


def test_a_null_in_a_saved_document_is_a_missing_key():
    document = tomllib.loads(GOOD) | {"notice": None, "feed": None}
    with pytest.raises(InputError, match="feed: is missing") as error:
        from_document(document, "design.json")
    assert [fault.where for fault in error.value.faults] == ["feed"]


def test_the_train_of_a_file_may_need_more_room_than_the_optimiser_is_given():
    document = tomllib.loads(GOOD + '\n[[train]]\nreagents = { lime = "pH 10" }\n')
    document["plant"]["max_stages"] = 1
    assert len(from_document(document, "x").decisions["stages"]) == 2


# ---------------------------------------------------------------------------------------------
# every key, spoiled


JUNK = [
    None, True, -1, 0, 10**400, float("nan"), float("inf"), "", "  ", "x", "-1 kg", "1\n2 mg/L",
    "1e999 mg/L", "nan mg/L", [], [1], [[]], {}, {"a": 1}, {"": ""}, {"Zn": {}}, ["Zn", "Zn"],
    "pH", "pH x", "nan to 5", "1 to 2 to 3", "\x00", "0 %", "100 %", "Fe(II)", "H+",
]  # fmt: skip


def paths_of(node, path=()):
    items = (
        node.items() if isinstance(node, dict) else enumerate(node) if type(node) is list else ()
    )
    for key, value in items:
        yield (*path, key)
        yield from paths_of(value, (*path, key))


@pytest.mark.parametrize("junk", JUNK, ids=lambda j: repr(j)[:14])
def test_whatever_a_key_holds_it_is_read_or_answered_line_by_line(junk, every_key):
    answers = []
    for path in list(paths_of(every_key.document)):
        document = copy.deepcopy(every_key.document)
        node = document
        for step in path[:-1]:
            node = node[step]
        node[path[-1]] = junk
        try:
            from_document(document, "f.toml")
        except InputError as error:
            answers.append(error)
    assert len(answers) > 10  # no junk fits more than a few keys
    for answer in answers:
        lines = str(answer).split("\n")
        assert len(lines) == len(answer.faults)
        for line in lines:
            assert line.startswith("f.toml: ")
            assert "; " in line


def test_faults_are_single_printable_lines():
    error = InputError("a.toml", [Fault("k", "is '1\n2\t\x1b[31m\u2028'", "write it anew")])
    assert str(error) == "a.toml: k: is '1\\n2\\t\\x1b[31m\\u2028'; write it anew"
    assert error.exit_code == 2


def test_no_design_carries_the_nearest():
    assert NoDesign("none").nearest is None
    assert NoDesign("none", nearest="closest").nearest == "closest"
    assert NoDesign("none").exit_code == 1


# ---------------------------------------------------------------------------------------------
# compounds


COMPOUNDS = {
    "Ca(OH)2": ({"Ca+2": 1, "H+": -2}, 2),
    "CaCO3": ({"Ca+2": 1, "CO3-2": 1}, 0),
    "MgO": ({"Mg+2": 1, "H+": -2}, 1),
    "NaOH": ({"Na+": 1, "H+": -1}, 1),
    "Na2CO3": ({"Na+": 2, "CO3-2": 1}, 0),
    "NaHCO3": ({"Na+": 1, "CO3-2": 1, "H+": 1}, 0),
    "NaHS": ({"Na+": 1, "HS-": 1}, 0),
    "Na2S:9H2O": ({"Na+": 2, "HS-": 1, "H+": -1}, 9),
    "H2S": ({"HS-": 1, "H+": 1}, 0),
    "H2SO4": ({"SO4-2": 1, "H+": 2}, 0),
    "NH3": ({"NH4+": 1, "H+": -1}, 0),
    "NH4OH": ({"NH4+": 1, "H+": -1}, 1),
    "NH4NO3": ({"NH4+": 1, "NO3-": 1}, 0),
    "HNO3": ({"NO3-": 1, "H+": 1}, 0),
    "(NH4)2SO4": ({"NH4+": 2, "SO4-2": 1}, 0),
    "NH4HCO3": ({"NH4+": 1, "CO3-2": 1, "H+": 1}, 0),
    "NH4Al(SO4)2:12H2O": ({"NH4+": 1, "Al+3": 1, "SO4-2": 2}, 12),
    "(NH4)2Fe(SO4)2:6H2O": ({"NH4+": 2, "Fe+2": 1, "SO4-2": 2}, 6),
    "Cu(NH3)4SO4": ({"NH4+": 4, "Cu+2": 1, "SO4-2": 1, "H+": -4}, 0),
    "CO2": ({"CO3-2": 1, "H+": 2}, -1),
    "FeSO4:7H2O": ({"Fe+2": 1, "SO4-2": 1}, 7),
    "Fe2(SO4)3": ({"Fe+3": 2, "SO4-2": 3}, 0),
    "Fe3O4": ({"Fe+2": 1, "Fe+3": 2, "H+": -8}, 4),
    "Fe(NO3)3:9H2O": ({"Fe+3": 1, "NO3-": 3}, 9),
    "Al2(SO4)3:14H2O": ({"Al+3": 2, "SO4-2": 3}, 14),
    "H2O": ({}, 1),
}


@pytest.mark.parametrize("formula", COMPOUNDS)
def test_a_compound_is_written_over_components(formula):
    parts = decompose(formula)
    assert parts == COMPOUNDS[formula]
    components, water = parts
    left = dict(elements_of(formula))
    for name, n in [*components.items(), ("H2O", water)]:
        for element, count in elements_of(name).items():
            left[element] = left.get(element, 0.0) - n * count
    assert all(abs(v) < 1e-12 for v in left.values())
    assert sum(charge_of(name) * n for name, n in components.items()) == 0


@pytest.mark.parametrize(
    "formula",
    # each would change an oxidation state, or take days to fall apart (urea)
    ["H2O2", "Cl2", "NaOCl", "Na2SO3", "Na2S2O3", "Na2S2O5", "Na2S2O8", "NaNO2", "N2O", "N2H4",
     "NH2OH", "H3NSO3", "FeS2", "Na2C2O4", "CO(NH2)2", "KMnO4", "Zn", "Fe", "Ca+2", "lime", "", "()", "Ca0"],
)  # fmt: skip
def test_what_is_no_sum_of_components_is_refused_in_words(formula):
    assert isinstance(decompose(formula), str)


CATIONS = [c for c in catalogue().components.values() if c.charge > 0 and c.name != "H+"]
ANIONS = ["Cl", "NO3", "SO4", "CO3", "OH"]


@given(st.sampled_from(CATIONS), st.sampled_from(ANIONS), st.integers(0, 12))
def test_any_salt_of_the_components_is_found_with_its_water(cation, anion, hydrate):
    size = {"SO4": 2, "CO3": 2}.get(anion, 1)
    ion = cation.name.rstrip("+-0123456789") if cation.name != "NH4+" else "NH4"
    formula = f"({ion}){size}({anion}){cation.charge}" + (f":{hydrate}H2O" if hydrate else "")
    ion_name = {"Cl": "Cl-", "NO3": "NO3-", "SO4": "SO4-2", "CO3": "CO3-2", "OH": "H+"}[anion]
    expected = {cation.name: float(size)}
    expected[ion_name] = float(-cation.charge if anion == "OH" else cation.charge)
    assert decompose(formula) == (expected, hydrate + (cation.charge if anion == "OH" else 0))


def test_labels():
    sulfide, ferrous = find_label("S(-II)"), find_label("Fe(II)")
    assert sulfide is not None
    assert ferrous is not None
    assert (sulfide.components, sulfide.g_per_mol) == ({"HS-": 1.0}, pytest.approx(32.06))
    assert ferrous.components == {"Fe+2": 1.0}
    assert find_label("") is None
    assert find_label("Unobtainium") is None


# ---------------------------------------------------------------------------------------------
# one key replaced


def test_one_key_is_replaced_in_a_copy(every_key):
    before = copy.deepcopy(every_key.document)
    key = "reagents.hydrated lime.price"
    dearer = with_value(every_key, key, "210 USD/t")
    assert dearer.reagents["hydrated lime"].price_USD_per_t == 210.0
    assert value_at(dearer, key) == "210 USD/t"
    assert every_key.document == before
    assert with_value(dearer, key, "190 USD/t") == every_key


@pytest.mark.parametrize(
    ("key", "text", "found"),
    [
        ('reagents."hydrated lime".price', "1 USD/t",
         lambda f: f.reagents["hydrated lime"].price_USD_per_t == 1.0),
        ("products[1].min_recovery", "10 %", lambda f: f.products[0].min_recovery == 0.1),
        ("feed.assay.Fe(II)", "1 mmol/L",
         lambda f: f.feed.assay_mol_per_L["Fe+2"] == pytest.approx(1e-3)),
        ("feed.pH", 3.5, lambda f: f.feed.pH == 3.5),
        ("plant.max_stages", 1, lambda f: f.plant.max_stages == 1),
    ],
)  # fmt: skip
def test_key_paths(key, text, found, every_key):
    assert found(with_value(every_key, key, text))


@pytest.mark.parametrize(
    ("key", "text", "words"),
    [
        ("reagents.hydrated lime.prise", "1 USD/t", "did you mean price"),
        ("reagents.hydratd lime.price", "1 USD/t", "did you mean hydrated lime"),
        ("products[2].payable", "40 %", r"no entry '\[2\]'; did you mean \[1\]"),
        ("products[0].payable", "40 %", r"no entry '\[0\]'"),
        ("products[x].payable", "40 %", r"no entry '\[x\]'"),
        ("products.payable", "40 %", "no entry 'payable'"),
        ("feed.pH.deeper", "1", "no key 'deeper'"),
        ("", "1", "no key ''"),
        ("reagents.caustic.price", "1 USD/m3", "reagents.caustic.price: .*dimension"),
    ],
)
def test_a_key_that_is_not_there_is_answered(key, text, words, every_key):
    with pytest.raises(InputError, match=words):
        with_value(every_key, key, text)


# ---------------------------------------------------------------------------------------------
# graphs


@pytest.mark.parametrize("stages", [1, 2, 4])
def test_train_graph(stages, every_key):
    graph = train_graph(every_key, stages, ["copper cake"])
    units = nx.get_node_attributes(graph, "unit")
    assert list(units.values()).count("mix") == list(units.values()).count("settle") == stages
    assert units["cake 1"] == "product"
    assert set(units.values()) <= set(UNIT_TYPES)
    numbers = sorted(nx.get_edge_attributes(graph, "stream").values())
    assert numbers == list(range(1, 3 * stages + 2))
    assert graph.nodes[f"TK-{stages}01"]["stage"] == stages
    line = nx.shortest_path(graph, "feed", "effluent")
    assert len(line) == 2 + 2 * stages
    assert nx.is_directed_acyclic_graph(graph)
