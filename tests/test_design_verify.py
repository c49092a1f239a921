"""Saving a design, reading it back, and catching whatever was changed in between."""

from __future__ import annotations

import copy
import json
import random
import tomllib
from collections.abc import Iterator
from dataclasses import fields
from pathlib import Path
from typing import Any

import pytest

import dosewright
from dosewright.design import (
    METHOD,
    SECTIONS,
    Design,
    SearchRecord,
    read,
    record_of,
    save,
    seal_of,
    to_json,
    train_text,
    write_text,
)
from dosewright.errors import InputError
from dosewright.flowsheet import from_document
from dosewright.trial import Trial, evaluate
from dosewright.verification import compare, verify
from rinse_water import TEXT

FLOWSHEETS = Path(__file__).parents[1] / "flowsheets"

#: sections that follow from the flowsheet and the decisions
COMPUTED = sorted(
    set(SECTIONS)
    - {
        "dosewright_design", "versions", "constants_fingerprint", "source_name", "flowsheet",
        "search", "seal",
    }
)  # fmt: skip


@pytest.fixture(scope="module")
def trial() -> Trial:
    flowsheet = from_document(tomllib.loads(TEXT), "rinse.toml")
    assert flowsheet.decisions is not None
    return evaluate(flowsheet, flowsheet.decisions)


@pytest.fixture(scope="module")
def design(trial: Trial) -> Design:
    return Design.of(trial, SearchRecord(12, 5, -2.1, float("nan"), 900, trial.cost_per_hour))


@pytest.fixture(scope="module")
def record(design: Design) -> dict[str, Any]:
    return record_of(design)


def leaves(node: Any, path: tuple[Any, ...] = ()) -> Iterator[tuple[tuple[Any, ...], Any]]:
    """Every number, flag and word of a record with its path."""
    if isinstance(node, dict | list):
        for key, value in node.items() if isinstance(node, dict) else enumerate(node):
            yield from leaves(value, (*path, key))
    else:
        yield path, node


def changed(record: dict[str, Any], path: tuple[Any, ...], *, reseal: bool) -> dict[str, Any]:
    """A copy of a record with one entry changed."""
    out = copy.deepcopy(record)
    node = out
    for key in path[:-1]:
        node = node[key]
    old = node[path[-1]]
    if isinstance(old, bool):
        new: Any = not old
    elif isinstance(old, int):
        new = old + 1
    elif isinstance(old, float):
        new = old * 1.0001 if abs(old) > 1e-6 else old + 1e-3
    else:
        new = f"{old}x"
    node[path[-1]] = new
    if reseal:
        out["seal"] = seal_of(out)
    return out


def put(path: Path, record: dict[str, Any]) -> Path:
    path.write_text(to_json(record), encoding="utf-8")
    return path


def computed_leaves(record: dict[str, Any]) -> list[tuple[Any, ...]]:
    return [path for path, _ in leaves(record) if path[0] in COMPUTED]


def test_clean_design_verifies(design: Design, tmp_path: Path) -> None:
    save(design, tmp_path / "d.json")
    verdict = verify(tmp_path / "d.json")
    assert verdict.differences == []
    assert verdict.limits_missed == []
    assert verdict.notes == []
    assert verdict.ok
    assert verdict.trial is not None
    assert verdict.trial.cost_per_hour == pytest.approx(design.cost_per_hour, rel=1e-12)


@pytest.mark.parametrize("name", ["corvane_adit.toml", "tessaly_row.toml", "every_key.toml"])
def test_no_false_alarm_on_the_demonstration_trains(name: str, tmp_path: Path) -> None:
    flowsheet = dosewright.load(FLOWSHEETS / name)
    assert flowsheet.decisions is not None
    trial = evaluate(flowsheet, flowsheet.decisions)
    save(trial, tmp_path / "d.json")
    verdict = verify(tmp_path / "d.json")
    assert verdict.differences == []
    assert verdict.ok == trial.feasible


def test_no_false_alarm_over_many_doses(trial: Trial, tmp_path: Path) -> None:
    draw = random.Random(5)
    for _ in range(25):
        stages = [
            {
                "reagents": {name: {"dose_kg_per_m3": draw.uniform(0.0, 1.5)}},
                "oxidant": draw.choice([None, "peroxide"]),
                "cake": draw.choice(["waste", "copper cake"]),
            }
            for name in draw.choices(["caustic", "hydrated lime"], k=draw.choice([1, 2]))
        ]
        again = evaluate(trial.flowsheet, {"stages": stages})
        save(again, tmp_path / "d.json")
        verdict = verify(tmp_path / "d.json")
        assert verdict.differences == []
        assert verdict.ok == again.feasible
        assert len(verdict.limits_missed) == len(again.shortfalls)


def test_missed_limits_are_named_and_not_ok(trial: Trial, tmp_path: Path) -> None:
    low = {"stages": [{"reagents": {"caustic": {"dose_kg_per_m3": 0.1}}, "cake": "waste"}]}
    save(evaluate(trial.flowsheet, low), tmp_path / "d.json")
    verdict = verify(tmp_path / "d.json")
    assert not verdict.ok
    assert verdict.differences == []
    assert {row.limit for row in verdict.limits_missed} >= {"Zn, dissolved", "Cu, dissolved"}


def test_every_single_change_of_a_computed_entry_is_found(record: dict[str, Any]) -> None:
    paths = computed_leaves(record)
    assert len(paths) > 300
    assert {path[0] for path in paths} >= {"costs", "limits", "stages", "streams", "decisions"}
    unseen = [
        path
        for path in paths
        if not compare(changed(record, path, reseal=True), record, tolerance=1e-6)
    ]
    assert unseen == []


def test_resealed_changes_are_found_from_the_file_alone(
    record: dict[str, Any], tmp_path: Path
) -> None:
    by_section: dict[str, list[tuple[Any, ...]]] = {}
    for path in computed_leaves(record):
        by_section.setdefault(path[0], []).append(path)
    draw = random.Random(11)
    chosen = [
        path for paths in by_section.values() for path in draw.sample(paths, min(8, len(paths)))
    ]
    assert len(chosen) >= 50
    for path in chosen:
        verdict = verify(put(tmp_path / "d.json", changed(record, path, reseal=True)))
        assert not verdict.ok, path
        assert "seal" not in {d.where for d in verdict.differences}
        if path[0] != "decisions":
            # exactly the entry that was changed is named
            where = "".join(f"[{k}]" if isinstance(k, int) else f".{k}" for k in path)[1:]
            assert [d.where for d in verdict.differences] == [where]


def test_the_seal_covers_everything(record: dict[str, Any], tmp_path: Path) -> None:
    paths = [path for path, value in leaves(record) if path[0] not in {"seal", *COMPUTED}]
    for path in paths:
        if path[0] == "dosewright_design":
            continue
        verdict = verify(put(tmp_path / "d.json", changed(record, path, reseal=False)))
        assert not verdict.ok, path
        assert "seal" in {d.where for d in verdict.differences}, path


@pytest.mark.parametrize(
    ("where", "text"),
    [
        (("reagents", "hydrated lime", "price"), "191 USD/t"),
        (("reagents", "hydrated lime", "strength"), "93 %"),
        (("reagents", "hydrated lime", "utilisation"), "91 %"),
        (("reagents", "hydrated lime", "make_up"), "16 %"),
        (("reagents", "hydrated lime", "max_dose"), "21 kg/m3"),
        (("reagents", "caustic", "formula"), "KOH"),
        (("oxidants", "peroxide", "price"), "421 USD/t"),
        (("oxidants", "peroxide", "conversion"), "97 %"),
        (("feed", "flow"), "10.1 m3/h"),
        (("feed", "assay", "Cu"), "121 mg/L"),
        (("feed", "assay", "SO4"), "821 mg/L"),
        (("prices", "water"), "0.81 USD/m3"),
        (("prices", "disposal", "plain"), "46 USD/t"),
        (("prices", "metal", "Cu"), "9100 USD/t"),
        (("plant", "overflow_solids"), "6 mg/L"),
        (("effluent", "pH"), "6.0 to 9.9"),
        (("effluent", "dissolved", "Zn"), "11 mg/L"),
    ],
)
def test_resealed_changes_of_the_flowsheet_show_in_the_numbers(
    record: dict[str, Any], tmp_path: Path, where: tuple[str, ...], text: str
) -> None:
    out = copy.deepcopy(record)
    node = out["flowsheet"]
    for key in where[:-1]:
        node = node[key]
    assert node[where[-1]] != text
    node[where[-1]] = text
    out["seal"] = seal_of(out)
    verdict = verify(put(tmp_path / "d.json", out))
    assert not verdict.ok
    assert verdict.differences


@pytest.mark.parametrize(
    ("where", "value"),
    [
        (("flowsheet", "feed", "pH"), 17.0),
        (("flowsheet", "reagents"), {}),
        (("flowsheet", "feed"), 3),
        (("decisions", "stages"), []),
        (("decisions", "stages"), "none"),
        (("decisions", "stages", 0, "reagents"), ["caustic"]),
        (("decisions", "stages", 0, "reagents", "caustic"), 1.2),
        (("decisions", "stages", 0, "reagents", "caustic"), {"dose_kg_per_m3": -1.0}),
        (("decisions", "stages", 0, "oxidant"), ["peroxide"]),
        (("decisions", "stages", 0, "cake"), "nowhere"),
    ],
)
def test_contents_that_cannot_be_solved_get_a_verdict(
    record: dict[str, Any], tmp_path: Path, where: tuple[Any, ...], value: Any
) -> None:
    out = copy.deepcopy(record)
    node: Any = out
    for key in where[:-1]:
        node = node[key]
    node[where[-1]] = value
    out["seal"] = seal_of(out)
    verdict = verify(put(tmp_path / "d.json", out))
    assert not verdict.ok
    assert verdict.trial is None
    assert verdict.differences[0].where == "decisions"


@pytest.mark.parametrize("section", COMPUTED)
def test_missing_and_extra_entries_are_found(record: dict[str, Any], section: str) -> None:
    table = record[section]
    if isinstance(table, dict):
        more = {**table, "another": 1.0}
    elif isinstance(table, list):
        more = [*table, {"another": 1.0}]
    else:
        more = [table]
    found = compare({**record, section: more}, record, 1e-6)
    assert found
    assert all(d.where.startswith(section) for d in found)
    if isinstance(table, list) and table:
        assert compare({**record, section: table[:-1]}, record, 1e-6)
    assert compare({k: v for k, v in record.items() if k != section}, record, 1e-6)
    assert [d.where for d in compare({**record, "another": 1}, record, 1e-6)] == ["another"]


def test_rounding_is_no_difference(record: dict[str, Any]) -> None:
    out = copy.deepcopy(record)
    for path, value in leaves(record):
        if isinstance(value, float):
            node: Any = out
            for key in path[:-1]:
                node = node[key]
            node[path[-1]] = value * (1.0 + 1e-9)
    assert compare(out, record, 1e-6) == []


def test_other_constants_are_a_difference_and_other_versions_a_note(
    record: dict[str, Any], tmp_path: Path
) -> None:
    out = copy.deepcopy(record)
    out["constants_fingerprint"] = "0" * 64
    out["versions"]["numpy"] = "0.0.1"
    out["seal"] = seal_of(out)
    verdict = verify(put(tmp_path / "d.json", out))
    assert [d.where for d in verdict.differences] == ["constants_fingerprint"]
    assert any("numpy was 0.0.1" in note for note in verdict.notes)


@pytest.mark.parametrize(
    ("name", "value"),
    [
        ("best_cost_USD_per_h", 1.0),
        ("best_cost_USD_per_h", None),
        ("trains_polished", -1),
        ("trains_polished", 1.5),
        ("lattice_proposals", 13),
        ("exact_evaluations", 11),
        ("lattice_value_USD_per_h", "low"),
        ("method", "by luck"),
    ],
)
def test_search_record_must_agree_with_itself_and_the_cost(
    record: dict[str, Any], tmp_path: Path, name: str, value: Any
) -> None:
    out = copy.deepcopy(record)
    assert set(out["search"]) == {f.name for f in fields(SearchRecord)}
    out["search"][name] = value
    out["seal"] = seal_of(out)
    verdict = verify(put(tmp_path / "d.json", out))
    assert not verdict.ok
    assert {d.where for d in verdict.differences} == {f"search.{name}"}


def test_numbers_that_are_not_finite_are_saved_as_null(record: dict[str, Any]) -> None:
    assert record["search"]["lattice_difference"] is None
    assert record["search"]["method"] == METHOD


def test_same_trial_same_bytes(design: Design, tmp_path: Path) -> None:
    again = Design.of(evaluate(design.flowsheet, design.flowsheet.decisions or {}), design.search)
    save(design, tmp_path / "a.json")
    save(again, tmp_path / "b.json")
    assert (tmp_path / "a.json").read_bytes() == (tmp_path / "b.json").read_bytes()
    assert sorted(p.name for p in tmp_path.iterdir()) == ["a.json", "b.json"]


def test_file_holds_no_folder_of_the_machine(trial: Trial, tmp_path: Path) -> None:
    source = tmp_path / "rinse.toml"
    source.write_text(TEXT, encoding="utf-8")
    flowsheet = dosewright.load(source)
    save(evaluate(flowsheet, flowsheet.decisions or {}), tmp_path / "d.json")
    assert str(tmp_path) not in (tmp_path / "d.json").read_text(encoding="utf-8")
    assert read(tmp_path / "d.json")["source_name"] == "rinse.toml"


def test_read_gives_back_what_was_saved(
    design: Design, record: dict[str, Any], tmp_path: Path
) -> None:
    save(design, tmp_path / "d.json")
    assert read(tmp_path / "d.json") == record


def test_cut_short_anywhere_is_refused(record: dict[str, Any], tmp_path: Path) -> None:
    raw = to_json(record).encode()
    path = tmp_path / "d.json"
    for length in [0, 1, 2, *range(7, len(raw) - 2, len(raw) // 40)]:
        path.write_bytes(raw[:length])
        with pytest.raises(InputError, match=r"d\.json"):
            verify(path)


@pytest.mark.parametrize(
    "raw",
    [
        b"", b"null", b"[]", b"3", b'"text"', b"{}", b"\xff\xfe{}", b"{'a': 1}",
        b'{"dosewright_design": 2}', b'{"dosewright_design": true}', b'{"dosewright_design": "1"}',
        b'{"dosewright_design": 1}', b'{"dosewright_design": NaN}', b'{"a": 1, "a": 2}',
        b"[" * 200_000, b'{"dosewright_design": 1, "x": "\\ud800"}',
    ],
)  # fmt: skip
def test_what_is_no_design_file_is_refused(raw: bytes, tmp_path: Path) -> None:
    path = tmp_path / "d.json"
    path.write_bytes(raw)
    with pytest.raises(InputError, match=r"d\.json") as caught:
        verify(path)
    assert caught.value.exit_code == 2


@pytest.mark.parametrize("section", sorted(SECTIONS))
def test_missing_or_mistyped_sections_are_refused(
    record: dict[str, Any], section: str, tmp_path: Path
) -> None:
    for out in (
        {k: v for k, v in record.items() if k != section},
        {**record, section: {} if isinstance(record[section], list) else [1]},
    ):
        with pytest.raises(InputError, match=section if "dosewright_design" in out else "design"):
            read(put(tmp_path / "d.json", out))


@pytest.mark.parametrize("tolerance", [0.0, -1.0, 1.0, float("nan")])
def test_no_tolerance(tolerance: float, tmp_path: Path) -> None:
    with pytest.raises(InputError, match="tolerance"):
        verify(tmp_path / "d.json", tolerance=tolerance)


def test_failed_write_leaves_the_old_file(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = tmp_path / "d.json"
    path.write_text("old", encoding="utf-8")

    def fail(*_args: object) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(Path, "replace", fail)
    with pytest.raises(InputError, match="No space left"):
        write_text(path, "new")
    assert path.read_text(encoding="utf-8") == "old"
    assert [p.name for p in tmp_path.iterdir()] == ["d.json"]


def test_a_link_stays_a_link(tmp_path: Path) -> None:
    (tmp_path / "real").mkdir()
    target = tmp_path / "real" / "d.json"
    target.write_text("old", encoding="utf-8")
    link = tmp_path / "d.json"
    link.symlink_to(target)
    write_text(link, "new")
    assert link.is_symlink()
    assert target.read_text(encoding="utf-8") == "new"


def test_devices_are_written_to_not_replaced() -> None:
    write_text("/dev/null", "new")
    assert Path("/dev/null").is_char_device()


@pytest.mark.parametrize("name", ["", "no such folder/d.json", ".", "x" * 300, "a\0b"])
def test_paths_that_cannot_be_written(
    name: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    with pytest.raises(InputError, match=r"cannot be written|path is empty"):
        write_text(name, "new")
    assert list(tmp_path.iterdir()) == []


def test_train_in_one_line(trial: Trial) -> None:
    text = "peroxide + caustic pH 4.20 -> waste | hydrated lime pH 9.00 -> copper cake"
    assert train_text(trial) == text


def test_design_is_a_trial_with_all_its_entries(design: Design, trial: Trial) -> None:
    assert isinstance(design, Trial)
    for field in fields(Trial):
        assert getattr(design, field.name) is getattr(trial, field.name)


def test_record_is_json_of_plain_types(record: dict[str, Any]) -> None:
    assert json.loads(to_json(record)) == record
    assert list(SECTIONS) == [*[k for k in record if k != "seal"], "seal"]
