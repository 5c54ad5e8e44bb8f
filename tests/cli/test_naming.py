from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

Run = Callable[..., Any]


def shots(machine: str, sequence: str, label: str | None, hour: int) -> list[dict[str, Any]]:
    """Return five shots that sweep the hold time, and one after which it was changed by hand."""
    records: list[dict[str, Any]] = [
        {
            "format": 1,
            "machine": machine,
            "started": f"2026-10-05T{hour}:{minute:02}:00+02:00",
            "sequence": sequence,
            "swept": ["hold_time"],
            "parameters": {"hold_time": {"value": 10.0 * minute, "unit": "ms"}, "coil_current": 61.0},
            "observables": {"atom_number": 121000.0 - 900 * minute},
        }
        for minute in range(6)
    ]
    return [record if label is None else record | {"scan": label} for record in records]


@pytest.fixture
def two(at_home: Path, run: Run) -> Path:
    """Return a store of two machines that use the same label, and a label of digits."""
    lines = [
        *shots("heron", "hold", "decay", 20),
        *shots("egret", "hold", "decay", 21),
        *shots("heron", "hold", "alone", 22),
        *shots("heron", "look", "1", 23),
    ]
    path = at_home / "a.jsonl"
    path.write_text("".join(json.dumps(record) + "\n" for record in lines), encoding="utf-8")
    assert run("take", path, "--new").code == 0
    return at_home


def answered(run: Run, *words: str) -> dict[str, Any]:
    answer = run(*words, "--json")
    assert answer.code == 0, answer.err
    document: dict[str, Any] = json.loads(answer.out)
    return document


def test_a_shared_label_gives_way_to_the_id(two: Path, run: Run, on_screen: Callable[..., str]) -> None:
    scans = answered(run, "scans")["scans"]
    keys = {scan["id"]: scan["key"] for scan in scans}
    assert keys == {
        scan["id"]: str(scan["id"]) if scan["label"] == "decay" else f"{scan['label']}#1" for scan in scans
    }
    for scan in scans:
        assert answered(run, "scan", scan["key"])["scan"]["id"] == scan["id"]
        fits = answered(run, "fit", scan["key"], "exponential", "-o", "atom_number")["fits"]
        assert [fit["scan"] for fit in fits] == [scan["key"]]
    assert {fit["scan"] for fit in answered(run, "fits")["fits"]} == set(keys.values())
    assert {shot["scan"] for shot in answered(run, "shots")["shots"]} == set(keys.values())
    assert {line.split("\t")[1] for line in run("scans").out.splitlines()[1:]} == set(keys.values())
    shared = next(scan["key"] for scan in scans if scan["label"] == "decay")
    assert answered(run, "fits", shared)["fits"][0]["scan"] == shared
    assert run("export", shared, "a.csv").out.startswith(f"{shared}: 6 shots written")
    text = on_screen("scan", shared)
    assert f"{shared} (decay#1)" in text
    assert f"next: nightfold fit {shared} MODEL -o atom_number" in text
    assert f"{shared} (decay#1)" in on_screen("scans")


def test_digits_are_an_id_and_say_so_where_a_label_looks_like_them(two: Path, run: Run) -> None:
    scans = answered(run, "scans")["scans"]
    first = next(scan for scan in scans if scan["id"] == 1)
    answer = run("scan", "1", "--json")
    assert json.loads(answer.out)["scan"]["id"] == first["id"]
    assert "nightfold: 1 is scan id 1; the label 1 is 1#1" in answer.err
    labelled = run("scan", "1#1", "--json")
    assert json.loads(labelled.out)["scan"]["label"] == "1"
    assert "is scan id" not in labelled.err
    assert run("scan", "99").code == 3


def test_a_label_of_digits_is_found_where_no_scan_has_that_id(at_home: Path, run: Run) -> None:
    lines = shots("heron", "hold", "2026", 20)
    (at_home / "a.jsonl").write_text("".join(json.dumps(record) + "\n" for record in lines))
    run("take", "a.jsonl", "--new")
    assert answered(run, "scan", "2026")["scan"]["label"] == "2026"
    assert len(answered(run, "shots", "--scan", "2026")["shots"]) == 6


def test_the_machine_is_shown_where_there_are_several(
    two: Path, run: Run, on_screen: Callable[..., str]
) -> None:
    late = {**shots("egret", "hold", None, 22)[0], "parameters": {"hold_time": 0.0, "coil_current": 62.0}}
    del late["swept"]
    lines = [{**late, "started": f"2026-10-06T01:{minute:02}:00+02:00"} for minute in range(3)]
    (two / "b.jsonl").write_text("".join(json.dumps(record) + "\n" for record in lines))
    run("take", "b.jsonl")
    every = answered(run, "shots")["shots"]
    assert {shot["machine"] for shot in every} == {"heron", "egret"}
    assert [shot["machine"] for shot in answered(run, "shots", "--limit", "4")["shots"]] == ["heron"] + [
        "egret"
    ] * 3
    assert run("shots").out.split("\n")[0].split("\t")[:3] == ["uid", "started", "machine"]
    edits = answered(run, "edits")["edits"]
    assert ("egret", "coil_current") in {(edit["machine"], edit["parameter"]) for edit in edits}
    assert answered(run, "edits", "--machine", "heron")["edits"] == [
        edit for edit in edits if edit["machine"] == "heron"
    ]
    assert "egret" in on_screen("edits")
    assert "egret" in on_screen("shots")
