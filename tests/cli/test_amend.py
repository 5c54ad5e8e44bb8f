"""``amend``: histories and corrections; ``fit --again`` after them."""

from __future__ import annotations

import json
import shutil
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from nightfold.opening import open_store
from nightfold_cli.failures import UsageError
from nightfold_cli.typed import typed_value

Run = Callable[..., Any]
Show = Callable[..., str]
UID = "heron-20260928-0007"


@pytest.fixture
def where(heron: Path, at_home: Path) -> Path:
    """Return a store of two nights that may be changed, with one kept fit."""
    path = Path(shutil.copy(heron / "heron.sqlite", at_home / "copy.sqlite"))
    with open_store(path) as store:
        store.fit("loss-coarse#1", "lorentzian", observable="atom_number")
    return path


def decoded(answer: Any) -> dict[str, Any]:
    assert answer.code == 0, answer.err
    found: dict[str, Any] = json.loads(answer.out)
    return found


def correct(run: Run, where: Path, *more: str) -> Any:
    return run(
        "--store", where, "amend", UID, "--set", "coil_current=60900 mA", "--because", "read off", "--by", "ann", *more
    )  # fmt: skip


@pytest.mark.parametrize("width", [80, 120])
def test_a_history_on_a_screen(where: Path, run: Run, on_screen: Show, width: int, at_home: Path) -> None:
    correct(run, where)
    late = {
        "uid": UID,
        "observables": {"atom_number": {"value": 99000, "stderr": 2000}},
        "derivation": "camera-fit",
    }
    Path("late.jsonl").write_text(json.dumps(late) + "\n", encoding="utf-8")
    assert run("--store", where, "take", "late.jsonl").code == 0
    text = on_screen("--store", where, "amend", UID[:-1] + "7", width=width)
    lines = text.split("\n")
    assert all(len(line) <= width for line in lines[1:])
    assert any("09-28 20:14:42  taken      from" in line for line in lines)
    assert "corrected  coil_current 64.2 A -> 60.9 A" in text
    assert "           ann: read off" in text
    flat = " ".join(text.split())
    assert "fit 1, lorentzian of atom_number in loss-coarse#1: used; stale since" in flat
    assert "atom_number 1.392(16)e5 -> 9.90(20)e4 atoms (camera-fit)" in flat
    current = next(place for place, line in enumerate(lines) if line.startswith("atom_number "))
    assert "9.90(20)e4" in lines[current]
    assert " since 20" in lines[current]
    assert lines[current + 1].split()[0] == "1.392(16)e5"
    assert " until 20" in lines[current + 1]
    assert on_screen("--store", where, "shots", UID).count("read again") == 1


def test_a_history_for_programs(where: Path, run: Run) -> None:
    correct(run, where)
    (history,) = decoded(run("--store", where, "amend", UID, "--json"))["history"]
    assert [event["kind"] for event in history["events"]] == ["taken", "fit", "corrected"]
    taken, fit, corrected = history["events"]
    assert taken["at"] == history["started"]
    assert fit["new"] == {
        "fit": 1, "scan": "loss-coarse#1", "model": "lorentzian", "observable": "atom_number",
        "along": "coil_current", "role": "used", "state": "stale",
    }  # fmt: skip
    assert (corrected["what"], corrected["old"], corrected["new"], corrected["unit"]) == (
        "coil_current", 64.2, 60.9, "A",
    )  # fmt: skip
    assert (corrected["by"], corrected["why"]) == ("ann", "read off")
    (reading,) = history["readings"]["atom_number"]
    assert (reading["unit"], reading["since"], reading["until"]) == ("atoms", None, None)
    both = run("--store", where, "amend", UID, "heron-20260928-0008")
    assert both.out.count("\nheron-20260928-0008\t") > 3
    events = both.out.split("\n\n")[0].split("\n")
    assert events[0].split("\t")[:3] == ["uid", "at", "kind"]
    assert events[3].split("\t")[2:] == [
        "corrected",
        "coil_current",
        "64.2",
        "60.9",
        "A",
        "ann",
        "read off",
        "1",
    ]


def test_a_correction_says_what_is_stale_and_fit_again_mends_it(
    where: Path, run: Run, on_screen: Show
) -> None:
    with open_store(where) as store:
        (before,) = store.fits()
    answer = decoded(correct(run, where, "--json"))
    stale = {
        "id": 1, "scan": "loss-coarse#1", "model": "lorentzian", "observable": "atom_number", "along": "coil_current",
        "slice": {},
    }  # fmt: skip
    number, change = answer.pop("number"), {"uid": UID, "parameter": "coil_current", "unit": "A"}
    assert answer == {
        "schema": 1, "corrected": 1, "dry_run": False, "shots": [UID], "stale": [stale],
        "changes": [change | {"old": 64.2, "new": 60.9}],
    }  # fmt: skip
    said = run(
        "--store", where, "amend", UID, "--set", "coil_current=60.8", "--because", "no, that", "--by", "ann"
    )
    assert f"correction {number + 1}; 'amend --undo {number + 1}' takes it back" in said.err
    assert said.out == "1 shot corrected\nloss-coarse#1\tlorentzian, atom_number along coil_current\n"
    assert "go on with: nightfold fit --again loss-coarse#1" in said.err
    screen = on_screen("--store", where, "fit", "--again", "loss-coarse#1").split("\n")
    with open_store(where) as store:
        (after,) = store.fits()
        assert store.shot(UID).parameters["coil_current"].value == 60.8
    assert all(len(line) <= 80 for line in screen[1:])
    row = next(line.split() for line in screen if line.startswith("loss-coarse#1"))
    old, new = before.estimates["center"], after.estimates["center"]
    assert row[1] == "center"
    assert [float(word.partition("(")[0]) for word in row[2:4]] == [
        pytest.approx(estimate.value, abs=estimate.stderr / 10) for estimate in (old, new)
    ]
    assert float(row[5]) == pytest.approx((new.value - old.value) / old.stderr, abs=0.051)
    assert "no kept fit is stale: nothing to do again" in on_screen("--store", where, "fit", "--again")


def test_a_late_first_reading_is_told_with_what_made_it(
    at_home: Path, run: Callable[..., Any], on_screen: Callable[..., str]
) -> None:
    where = at_home / "late.sqlite"
    made = {"name": "od-fit", "version": "1"}
    with open_store(where, create=True) as store:
        store.take([{
            "uid": "late-1", "machine": "heron", "sequence": "hold", "started": "2026-10-05T20:00:00+00:00",
            "parameters": {"hold": 1.0},
        }])  # fmt: skip
        store.take(
            [{"uid": "late-1", "observables": {"n": {"value": 51420, "stderr": 1500}}, "derivation": made}]
        )
        store.take([{"uid": "late-1", "observables": {"n": 52000}, "derivation": made | {"version": "2"}}])
        store.take([{"uid": "late-1", "observables": {"m": 7}}])
    text = " ".join(on_screen("--store", where, "amend", "late-1", width=120).split())
    assert text.count("it may have brought n 5.14(15)e4 (od-fit 1)") == 2
    assert "-> 52000 (od-fit 2)" in text


def test_a_scan_is_corrected_by_a_factor_tried_first_and_undone(
    where: Path, run: Run, on_screen: Show
) -> None:
    def amend(*more: str) -> Any:
        return run("--store", where, "amend", *more)

    scan = ("--scan", "loss-coarse#1", "--because", "range")
    slip = amend(*scan, "--set", "coil_current=61")
    assert slip.code == 5
    assert "coil_current is an axis of it" in slip.err
    done = decoded(amend(*scan, "--set", "coil_current *= 1.2", "--json"))
    first = next(change for change in done["changes"] if change["uid"] == UID)
    assert (first["old"], first["new"]) == (64.2, 77.04)
    undone = decoded(amend("--undo", str(done["number"]), "--json"))
    assert undone["corrected"] == done["corrected"]
    assert undone["stale"] == []
    again = amend("--undo", str(done["number"]))
    assert (again.code, again.out) == (5, "")
    assert "nothing to undo" in again.err
    by_unit = amend(*scan, "--set", "coil_current*=2 A")
    assert (by_unit.code, "wanted a factor without unit" in by_unit.err) == (2, True)
    shifted = decoded(amend(*scan, "--set", "coil_current+=100 mA", "--dry-run", "--json"))
    assert (shifted["number"], shifted["dry_run"], shifted["changes"][0]["unit"]) == (None, True, "A")
    tried = on_screen("--store", where, "amend", *scan, "--set", "coil_current*=1.2", "--dry-run")
    assert "would be corrected" in tried
    assert all(len(line) <= 80 for line in tried.split("\n")[1:])
    assert f"(correction {done['number']})" in " ".join(on_screen("--store", where, "amend", UID).split())


def test_fit_again_in_json_has_the_form_of_a_fit(where: Path, run: Run) -> None:
    correct(run, where)
    answer = decoded(run("--store", where, "fit", "loss-coarse", "--again", "--json"))
    (fit,) = answer["fits"]
    assert answer["left"] == []
    new = decoded(run("--store", where, "fit", "loss-coarse", "lorentzian", "-o", "atom_number", "--json"))
    (contract,) = new["fits"]
    assert contract.keys() - {"derived"} <= fit.keys()
    assert fit["estimates"].keys() == contract["estimates"].keys()
    assert fit["estimates"]["center"]["value"] == pytest.approx(contract["estimates"]["center"]["value"])
    assert fit["before"]["id"] == 1
    assert fit["before"]["stale"]
    run(
        "--store",
        where,
        "amend",
        "--scan",
        "loss-coarse#1",
        "--set",
        "coil_current=61",
        "--because",
        "stuck",
        "--even-if-swept",
    )
    answer = decoded(run("--store", where, "fit", "--again", "--json"))
    assert answer["fits"] == []
    (left,) = answer["left"]
    assert "1 distinct value" in left["reason"]
    piped = run("--store", where, "fit", "--again")
    assert "left: fit 2, lorentzian of loss-coarse#1: " in piped.err
    assert piped.out.startswith("fit\tscan\tmodel\t")


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (["amend"], "found no shot, wanted UID"),
        (["amend", "--scan", "loss-coarse"], "a history is of one shot"),
        (["amend", UID, "--scan", "loss-coarse", "--set", "a=1", "--because", "x"], "found UID and --scan"),
        (["amend", UID, "--set", "coil_current=61"], "--set: found no reason, wanted --because"),
        (["amend", UID, "--set", "coil_current=61", "--because", " "], "--set: found no reason"),
        (["amend", UID, "--because", "x"], "--because: found nothing to change"),
        (
            ["amend", UID, "--set", "coil_current", "--because", "x"],
            "found 'coil_current', wanted NAME=VALUE",
        ),
        (["amend", UID, "--set", "a=1", "--set", "a=2", "--because", "x"], "--set a: found it twice"),
        (
            ["amend", UID, "--set", "coil_current=x", "--because", "x"],
            "--set coil_current: found 'x', wanted a number",
        ),
        (["fit"], "required: KEY, MODEL"),
        (["fit", "loss-coarse"], "required: MODEL"),
        (
            ["fit", "loss-coarse", "lorentzian", "--again"],
            "found loss-coarse and lorentzian, wanted one scan",
        ),
        (
            ["fit", "--again", "loss-coarse", "lorentzian"],
            "found loss-coarse and lorentzian, wanted one scan",
        ),
        (["fit", "--again", "--along", "coil_current"], "--along is for new ones"),
    ],
)
def test_usage(where: Path, run: Run, words: list[str], said: str) -> None:
    answer = run("--store", where, *words)
    assert (answer.code, answer.out) == (2, "")
    assert said in answer.err


@pytest.mark.parametrize(
    ("words", "code", "said"),
    [
        (["nobody", "--set", "coil_current=61"], 3, "shot 'nobody'"),
        ([UID, "--set", "coil=61"], 3, "parameter 'coil': heron has none of that name; it has "),
        ([UID, "--set", "coil_current=1 V"], 5, "parameters.coil_current.unit: found 'V'"),
        (
            [UID, "--set", "coil_current=64200 mA"],
            5,
            "found 64.2 A, wanted another value: it has this one already",
        ),
    ],
)
def test_refusals(where: Path, run: Run, words: list[str], code: int, said: str) -> None:
    answer = run("--store", where, "amend", *words, "--because", "x")
    assert (answer.code, answer.out) == (code, "")
    assert said in answer.err


@pytest.mark.parametrize(
    ("kind", "text", "value"),
    [
        ("number", "61.3", 61.3),
        ("number", " 61.3 A ", {"value": 61.3, "unit": "A"}),
        ("number", "61.3A", {"value": 61.3, "unit": "A"}),
        ("number", "3eV", {"value": 3, "unit": "eV"}),
        ("number", "1e3 1/ms", {"value": 1000.0, "unit": "1/ms"}),
        ("number", "\N{MINUS SIGN}.5", -0.5),
        ("number", "1180591620717411303425", 1180591620717411303425),
        ("number", "inf", float("inf")),
        ("truth", "True", True),
        ("truth", "false", False),
        ("text", "61.3 A", "61.3 A"),
        ("text", "true", "true"),
        ("text", "[1, 2.5]", [1, 2.5]),
        ("text", "[true]", "[true]"),
        (None, "x", "x"),
    ],
)
def test_values_as_people_type_them(kind: str | None, text: str, value: Any) -> None:
    found = typed_value("a", text, kind)
    assert (found, type(found)) == (value, type(value))


@pytest.mark.parametrize(
    ("kind", "text"),
    [("number", "A 61"), ("number", "1,5"), ("number", "1.5.2"), ("truth", "1"), ("truth", "")],
)
def test_values_that_are_none(kind: str, text: str) -> None:
    with pytest.raises(UsageError, match="--set a: found"):
        typed_value("a", text, kind)
