"""Every malformed file gets clear lines that name the file, the key and the remedy; exit code 2."""

import pytest

import dosewright
from bad_input_cases import CASES, GOOD
from dosewright.cli import main
from dosewright.errors import InputError


def test_there_are_enough_cases_and_the_base_is_good(tmp_path):
    assert len(CASES) >= 40
    file = tmp_path / "good.toml"
    file.write_text(GOOD, encoding="utf-8")
    flowsheet = dosewright.load(file)
    assert dosewright.evaluate(flowsheet, flowsheet.decisions).stages


@pytest.mark.parametrize(
    ("text", "words"), [case[1:] for case in CASES], ids=[case[0] for case in CASES]
)
def test_malformed_file_is_answered_by_clear_lines(text, words, tmp_path, capsys):
    file = tmp_path / "plant.toml"
    file.write_text(text, encoding="utf-8")
    assert main(["evaluate", str(file)]) == 2
    answer = capsys.readouterr().err
    assert "Traceback" not in answer
    for word in words:
        assert word in answer
    for line in answer.strip().splitlines():
        assert line.startswith(f"error: {file}: ")
        assert "; " in line  # what is wrong; what to do


def test_all_faults_of_a_file_are_shown_together(tmp_path):
    file = tmp_path / "plant.toml"
    file.write_text(GOOD.replace("2.5", "25").replace('"92 %"', '"92"'), encoding="utf-8")
    with pytest.raises(InputError) as error:
        dosewright.load(file)
    assert {fault.where for fault in error.value.faults} == {"feed.pH", "reagents.lime.strength"}


@pytest.mark.parametrize("kind", ["missing", "folder", "latin-1", "binary"])
def test_what_is_no_readable_file(kind, tmp_path, capsys):
    file = tmp_path / "x.toml"
    if kind == "folder":
        file.mkdir()
    elif kind == "latin-1":
        file.write_bytes("title = 'Grube Süd'".encode("latin-1"))
    elif kind == "binary":
        file.write_bytes(bytes(range(256)))
    assert main(["optimise", str(file)]) == 2
    answer = capsys.readouterr().err
    assert str(file) in answer
    assert len(answer.strip().splitlines()) == 1


@pytest.mark.parametrize(
    ("decisions", "word"),
    [
        ({}, "no stages"),
        ({"stages": []}, "no stages"),
        ({"stages": [3]}, "no table"),
        ({"stages": [{}]}, "adds nothing"),
        ({"stages": [{"reagents": {"lime": 3}}]}, "no dose"),
        ({"stages": [{"reagents": {"lime": {"pH": 7, "dose_kg_per_m3": 1}}}]}, "no dose"),
        ({"stages": [{"reagents": {"lime": {"dose_kg_per_m3": -1.0}}}]}, "negative"),
        ({"stages": [{"reagents": {"lime": {"dose_kg_per_m3": float("nan")}}}]}, "number"),
        ({"stages": [{"reagents": {"soda": {"pH": 7}}}]}, "soda"),
        ({"stages": [{"oxidant": "ozone"}]}, "ozone"),
        ({"stages": [{"reagents": {"lime": {"pH": 7}}, "cake": "gold"}]}, "gold"),
        ({"stages": [{"reagents": {"lime": {"pH": 7}}}] * 6}, "6 stages"),
        ({"stages": [{"reagents": ["lime"]}]}, "not a table"),
        ({"stages": [{"oxidant": ["peroxide"]}]}, "no oxidant"),
        ({"stages": [{"oxidant": "peroxide", "cake": {}}]}, "no destination"),
        ({"stages": [{"oxidant": "peroxide", "cak": "waste"}]}, "did you mean cake"),
        ({"stages": [{"reagents": {"lime": {"pH": 99}}}]}, "outside"),
        ({"stages": [{"reagents": {"lime": {"dose_kg_per_m3": 1e9}}}]}, "outside"),
        ({"stages": [{"reagents": {"lime": {"dose_kg_per_h": 10**400}}}]}, "number"),
        ({"stages": [{"reagents": {3: {"pH": 7}}}]}, "no reagent"),
        ([], "no stages"),
    ],
)
def test_decisions_that_do_not_fit_are_refused(decisions, word, tmp_path):
    file = tmp_path / "good.toml"
    file.write_text(GOOD, encoding="utf-8")
    with pytest.raises(InputError, match=word):
        dosewright.evaluate(dosewright.load(file), decisions)


def test_a_pH_out_of_reach_is_said_so(tmp_path):
    file = tmp_path / "good.toml"
    file.write_text(GOOD.replace('"pH 9.0"', '"pH 14.5"'), encoding="utf-8")
    flowsheet = dosewright.load(file)
    with pytest.raises(InputError, match="reach"):
        dosewright.evaluate(flowsheet, flowsheet.decisions)


def test_a_base_cannot_lower_the_pH(tmp_path):
    file = tmp_path / "good.toml"
    file.write_text(GOOD.replace('"pH 9.0"', '"pH 1.5"'), encoding="utf-8")
    flowsheet = dosewright.load(file)
    with pytest.raises(InputError, match="reach"):
        dosewright.evaluate(flowsheet, flowsheet.decisions)


BAD_BEAKERS = [
    ("", "pour"),
    ("[[pour]]\n", "volume or a mass"),
    ('[[pour]]\nvolume = "1 L"\ncontains = { CuSO4 = "1 apple/L" }\n', "pour[1].contains.CuSO4"),
    ('[[pour]]\nvolume = "1 L"\ncontains = { Qq = "1 mol/L" }\n', "pour[1].contains.Qq"),
    ('[[pour]]\nvolume = "1 kg"\n', "pour[1].volume"),
    ('[[pour]]\nmass = "1 g"\n', "pour[1].of"),
    ('[[pour]]\nmass = "1 g"\nof = "Ca(OH)2"\n', "no water"),
    ('[[pour]]\nvolume = "1 L"\n[settings]\nsolids = ["nope"]\n', "settings.solids"),
    ('[[pour]]\nvolume = "1 L"\nvolum = "2 L"\n', "pour[1].volum"),
    ('temperature = "hot"\n[[pour]]\nvolume = "1 L"\n', "temperature"),
]


@pytest.mark.parametrize(("text", "word"), BAD_BEAKERS)
def test_malformed_beaker_file(text, word, tmp_path, capsys):
    file = tmp_path / "beaker.toml"
    file.write_text(text, encoding="utf-8")
    assert main(["beaker", str(file)]) == 2
    answer = capsys.readouterr().err
    assert word in answer
    assert str(file) in answer
