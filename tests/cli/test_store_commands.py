from __future__ import annotations

import json
import shutil
import sqlite3
import tomllib
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

Run = Callable[..., Any]

RECORD = {
    "format": 1,
    "machine": "heron",
    "started": "2026-10-05T21:14:03+02:00",
    "sequence": "hold-in-trap",
    "parameters": {"coil_current": {"value": 61.25, "unit": "A"}},
    "observables": {"atom_number": {"value": 121000, "stderr": 3100}},
}


def write_lines(path: Path, *records: dict[str, Any] | str) -> Path:
    lines = [record if isinstance(record, str) else json.dumps(record) for record in records]
    path.write_text("".join(line + "\n" for line in lines), encoding="utf-8")
    return path


def decoded(answer: Any) -> dict[str, Any]:
    document: dict[str, Any] = json.loads(answer.out)
    assert document["schema"] == 1
    assert answer.out.count("\n") == 1
    return document


@pytest.fixture
def copy(heron: Path, at_home: Path) -> Path:
    """Return a store of two nights that may be changed."""
    return Path(shutil.copy(heron / "heron.sqlite", at_home / "copy.sqlite"))


# ---------------------------------------------------------------- which store


def test_store_is_named_on_stderr_when_piped(heron: Path, run: Run) -> None:
    where = heron / "heron.sqlite"
    for arguments in (
        ["--store", where, "nights"],
        ["nights", "--store", where],
        ["nights", f"--store={where}"],
    ):
        answer = run(*arguments)
        assert answer.code == 0
        assert answer.err == f"nightfold: store {where}\n"
        assert str(where) not in answer.out


def test_store_from_the_environment(heron: Path, run: Run, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("NIGHTFOLD_STORE", str(heron / "heron.sqlite"))
    assert "heron.sqlite" in run("nights", "--json").err


def test_store_is_named_on_the_terminal(heron: Path, on_screen: Callable[..., str]) -> None:
    where = heron / "heron.sqlite"
    assert on_screen("--store", where, "nights").startswith(f"store {where}\n")


@pytest.mark.parametrize("command", ["nights", "shots", "scans", "edits", "fits"])
def test_missing_store(command: str, run: Run) -> None:
    answer = run(command)
    assert (answer.code, answer.out) == (3, "")
    assert "nightfold.sqlite" in answer.err
    assert "no such file; make one with 'nightfold" in answer.err
    assert "Traceback" not in answer.err


def test_file_that_is_no_store(run: Run, at_home: Path) -> None:
    (at_home / "nightfold.sqlite").write_text("hello, I am a text of some length")
    answer = run("nights")
    assert answer.code == 5
    assert "nightfold.sqlite" in answer.err


# ---------------------------------------------------------------- new and take


def test_new_makes_a_store_once(run: Run, at_home: Path) -> None:
    assert decoded(run("new", "--json"))["store"].endswith("nightfold.sqlite")
    again = run("new")
    assert again.code == 5
    assert "exists" in again.err


def test_new_writes_a_starter_card(run: Run, at_home: Path) -> None:
    answer = run("new", "--machine", "egret", "--zone", "Europe/Vienna", "--json")
    assert decoded(answer)["card"] == "egret.toml"
    assert 'machine = "egret"' in (at_home / "egret.toml").read_text()
    other = run("--store", "other.sqlite", "new", "--machine", "egret")
    assert other.code == 2
    assert "egret.toml is there already" in other.err
    assert not (at_home / "other.sqlite").exists()


def test_new_with_an_impossible_zone_leaves_nothing(run: Run, at_home: Path) -> None:
    answer = run("new", "--machine", "egret", "--zone", "Europe/Atlantis")
    assert answer.code == 5
    assert "Atlantis" in answer.err
    assert list(at_home.iterdir()) == []


def test_take_needs_a_store_or_new(run: Run, at_home: Path) -> None:
    path = write_lines(at_home / "a.jsonl", RECORD)
    refused = run("take", path)
    assert refused.code == 3
    assert not (at_home / "nightfold.sqlite").exists()
    taken = run("take", path, "--new", "--json")
    assert taken.code == 0
    assert decoded(taken) == {"schema": 1, "new": 1, "known": 0, "amended": 0, "refused": []}
    assert decoded(run("take", path, "--json"))["known"] == 1


def test_refused_records_are_listed_and_the_good_ones_kept(run: Run, at_home: Path) -> None:
    bad = {**RECORD, "started": "yesterday"}
    path = write_lines(at_home / "a.jsonl", RECORD, bad, "{torn")
    answer = run("take", path, "--new")
    assert answer.code == 5
    assert answer.out.split("\n")[1].split("\t") == [str(path), "1", "0", "0", "2"]
    assert f"nightfold: refused {path}:2: started: found 'yesterday', wanted" in answer.err
    assert f"nightfold: refused {path}:3: " in answer.err
    assert "2 refused, 1 kept" in answer.err
    as_json = run("take", path, "--json")
    assert as_json.code == 5
    document = decoded(as_json)
    assert (document["new"], document["known"]) == (0, 1)
    assert [item["line"] for item in document["refused"]] == [2, 3]
    assert set(document["refused"][0]) == {"source", "line", "reason"}


def test_refusals_of_one_reason_are_one_line(run: Run, at_home: Path) -> None:
    bad = {**RECORD, "started": "yesterday"}
    path = write_lines(at_home / "a.jsonl", RECORD, *[bad] * 50, RECORD, bad, "{torn")
    answer = run("take", path, "--new")
    assert f"nightfold: refused {path}: lines 2-51, 53 (51): started: found 'yesterday', wanted" in answer.err
    assert answer.err.count("yesterday") == 1
    assert f"nightfold: refused {path}:54: " in answer.err
    assert "52 refused, 2 kept" in answer.err
    assert len(decoded(run("take", path, "--json"))["refused"]) == 52


def test_records_with_an_offset_and_no_card_lead_to_the_card(run: Run, at_home: Path) -> None:
    path = write_lines(at_home / "a.jsonl", RECORD, {**RECORD, "started": "2026-10-05T21:15:03+02:00"})
    hint = "times are shown in UTC, while the records of heron carry +02:00; a machine card names the zone: "
    assert run("take", path, path, "--new").err.count(hint) == 1
    winter = write_lines(at_home / "b.jsonl", RECORD, {**RECORD, "started": "2026-12-05T21:15:03+01:00"})
    assert hint not in run("take", winter).err
    (at_home / "heron.toml").write_text('machine = "heron"\nzone = "Europe/Vienna"\n')
    card = run("take", path, "--card", "heron.toml")
    assert card.code == 0, card.err
    assert hint not in card.err


def test_an_interruption_says_how_far_it_came(
    run: Run, at_home: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    records = [
        {**RECORD, "started": f"2026-10-{day:02}T{hour:02}:{minute:02}:03+02:00"}
        for day in (5, 6)
        for hour in range(10)
        for minute in range(60)
    ]
    path = write_lines(at_home / "a.jsonl", *records)
    from nightfold_cli.progress import Progress

    calls: list[int] = []

    def interrupt(self: Progress, done: int) -> None:
        calls.append(done)
        if len(calls) == 3:
            raise KeyboardInterrupt

    monkeypatch.setattr(Progress, "__call__", interrupt)
    answer = run("take", path, "--new")
    monkeypatch.undo()
    assert answer.code == 130
    taken = int(answer.err.partition("interrupted: the first ")[2].split()[0])
    assert 0 < taken < len(records)
    assert (
        f"the first {taken} lines of {path} taken and safe in the store; taking the file again goes on there"
        in answer.err
    )
    again = decoded(run("take", path, "--json", "--store", at_home / "nightfold.sqlite"))
    assert (again["known"], again["new"]) == (taken, len(records) - taken)


def test_a_file_of_bytes_is_refused_by_its_name(run: Run, at_home: Path) -> None:
    (at_home / "camera.dat").write_bytes(bytes(range(256)) * 40)
    answer = run("take", "camera.dat", "--machine", "heron", "--sequence", "hold", "--new")
    assert answer.code in (2, 5)
    assert any("camera.dat" in line and "found" in line for line in answer.err.split("\n"))


def test_a_missing_file_does_not_keep_the_others_out(run: Run, at_home: Path) -> None:
    path = write_lines(at_home / "a.jsonl", RECORD)
    answer = run("take", at_home / "gone.jsonl", path, "--new", "--json")
    assert answer.code == 3
    document = decoded(answer)
    assert document["new"] == 1
    assert "gone.jsonl" in document["refused"][0]["reason"]


def test_take_a_table(run: Run, at_home: Path) -> None:
    table = at_home / "decay.csv"
    table.write_text("hold_time [ms],atom_number [atoms]\n0,1000\n10,800\n20,640\n")
    words = [
        "--machine",
        "heron",
        "--sequence",
        "hold",
        "--swept",
        "hold_time",
        "--observables",
        "atom_number",
        "--cycle",
        "18",
    ]
    answer = run("take", table, *words, "--started-at", "2026-10-05T21:14:00+02:00", "--new", "--json")
    assert (answer.code, decoded(answer)["new"]) == (0, 3)
    shots = decoded(run("shots", "-p", "hold_time", "-o", "atom_number", "--json"))
    assert [shot["hold_time"] for shot in shots["shots"]] == [0, 10, 20]
    assert shots["shots"][1]["started"] == "2026-10-05T19:14:18+00:00"
    assert shots["units"] == {"hold_time": "ms", "atom_number": "atoms"}


def test_a_table_that_says_too_little(run: Run, at_home: Path) -> None:
    table = at_home / "decay.csv"
    table.write_text("hold_time [ms],atom_number [atoms]\n0,1000\n")
    answer = run("take", table, "--machine", "heron", "--new")
    assert answer.code == 2
    assert "hold_time" in answer.err


# ---------------------------------------------------------------- looking


def test_nights(heron: Path, run: Run) -> None:
    store = ("--store", heron / "heron.sqlite")
    first = decoded(run(*store, "nights", "--json"))["nights"][0]
    assert first["night"] == "2026-09-28"
    assert first["first"].endswith("+00:00")
    assert isinstance(first["sequences"], list)
    lines = run(*store, "nights").out.splitlines()
    assert lines[0].split("\t")[:3] == ["night", "machine", "from"]
    assert len({line.count("\t") for line in lines}) == 1
    assert len(decoded(run(*store, "nights", "--last", "1", "--json"))["nights"]) == 1


def test_shots(heron: Path, run: Run) -> None:
    store = ("--store", heron / "heron.sqlite")
    every = decoded(run(*store, "shots", "--set-aside", "--json"))["shots"]
    assert len(every) > len(decoded(run(*store, "shots", "--json"))["shots"])
    assert list(every[0]) == ["uid", "started", "machine", "sequence", "scan"]
    of_scan = decoded(run(*store, "shots", "--scan", "loss-coarse", "-o", "atom_number", "--json"))["shots"]
    assert {shot["scan"] for shot in of_scan} == {"loss-coarse#1"}
    assert len(decoded(run(*store, "shots", "--limit", "3", "--json"))["shots"]) == 3
    late = decoded(run(*store, "shots", "--since", "2026-09-29", "--json"))["shots"]
    assert min(shot["started"] for shot in late) >= "2026-09-28T22:00:00+00:00"


def test_one_shot(heron: Path, run: Run) -> None:
    answer = run("--store", heron / "heron.sqlite", "shots", "heron-20260928-0000", "--json")
    shot = decoded(answer)["shot"]
    assert shot["uid"] == "heron-20260928-0000"
    assert shot["parameters"]["coil_current"]["unit"] == "A"
    assert set(shot["observables"]["atom_number"]) == {
        *("value", "stderr", "unit", "state", "derived", "reread"),
    }
    assert not shot["observables"]["atom_number"]["reread"]
    assert not shot["parameters"]["coil_current"]["corrected"]
    assert shot["line"] == 1


@pytest.mark.parametrize(
    ("arguments", "code", "said"),
    [
        (["shots", "nobody"], 3, "nobody"),
        (["shots", "heron-20260928-0000", "--limit", "3"], 2, "--limit is for lists"),
        (["shots", "-o", "atom_numbr"], 3, "atom_number"),
        (["shots", "--since", "yesterday"], 2, "found 'yesterday', wanted a day or a time"),
        (["scan", "loss-corse"], 3, "loss-coarse"),
        (["scan", "loss-coarse", "-o", "colour"], 3, "atom_number"),
        (["nights", "--machine", "herom"], 3, "machine 'herom': not in this store; it has heron"),
        (["scans", "--machine", "herom"], 3, "machine 'herom': not in this store; it has heron"),
        (["scans", "--sequence", "hold-in-trip"], 3, "hold-in-trap"),
        (["edits", "--machine", "herom"], 3, "machine 'herom': not in this store; it has heron"),
        (
            ["edits", "-p", "coil_curent"],
            3,
            "parameter 'coil_curent': not in this store; it has coil_current",
        ),
        (["shots", "--machine", "herom"], 3, "it has heron"),
        (["shots", "-p", "coil_curent"], 3, "coil_current"),
        (["nights", "--machine", "herom", "--json"], 3, "heron"),
        (["fit", "loss-coarse", "lorenzian"], 3, "lorentzian"),
        (["fit", "evaporation-map", "gaussian"], 2, "axes"),
        (["fit", "loss-coarse", "lorentzian", "-o", "colour"], 3, "colour"),
        (["export", "loss-coarse", "loss.txt"], 2, "wanted .nc or .csv"),
        (["set-aside", "nobody", "--reason", "why"], 3, "nobody"),
        (["set-aside", "nobody"], 2, "--reason"),
    ],
)
def test_what_cannot_be_done(arguments: list[str], code: int, said: str, heron: Path, run: Run) -> None:
    answer = run("--store", heron / "heron.sqlite", *arguments)
    assert answer.code == code, answer.err
    assert said in answer.err
    assert answer.out == ""


def test_scans(heron: Path, run: Run) -> None:
    store = ("--store", heron / "heron.sqlite")
    scans = decoded(run(*store, "scans", "--json"))["scans"]
    coarse = next(scan for scan in scans if scan["label"] == "loss-coarse")
    wanted = {"id", "label", "round", "machine", "sequence", "axes", "shots", "set_aside", "first", "last"}
    assert wanted <= set(coarse)
    axis = coarse["axes"][0]
    assert list(axis) == ["parameter", "unit", "points", "low", "high", "values"]
    assert (axis["parameter"], axis["unit"], axis["points"]) == ("coil_current", "A", 31)
    assert coarse["first"].endswith("+00:00")
    assert scans == sorted(scans, key=lambda scan: str(scan["first"]))
    assert len(decoded(run(*store, "scans", "--last", "2", "--json"))["scans"]) == 2
    only = decoded(run(*store, "scans", "--sequence", "kick-and-hold", "--json"))["scans"]
    assert {scan["sequence"] for scan in only} == {"kick-and-hold"}
    head, *lines = run(*store, "scans").out.splitlines()
    assert head.split("\t")[1] == "scan"
    assert len(lines) == len(scans)


def test_axis_of_words(run: Run, at_home: Path) -> None:
    records = [
        {
            **RECORD,
            "started": f"2026-10-05T21:{minute:02}:00+02:00",
            "scan": "looks",
            "swept": ["imaging_axis"],
            "parameters": {"imaging_axis": "xyz"[minute % 3]},
        }
        for minute in range(6)
    ]
    run("take", write_lines(at_home / "a.jsonl", *records), "--new")
    axis = decoded(run("scans", "--json"))["scans"][0]["axes"][0]
    assert axis == {
        "parameter": "imaging_axis",
        "unit": None,
        "points": 3,
        "low": None,
        "high": None,
        "values": ["x", "y", "z"],
    }


def test_scan(heron: Path, run: Run) -> None:
    store = ("--store", heron / "heron.sqlite")
    document = decoded(run(*store, "scan", "loss-coarse", "--json"))
    assert document["scan"]["key"] == "loss-coarse#1"
    assert len(document["points"]) == 31
    point = document["points"][0]
    assert set(point["observables"]["atom_number"]) == {"count", "mean", "scatter", "stderr"}
    head, *lines = run(*store, "scan", "loss-coarse").out.splitlines()
    assert head.split("\t")[:4] == ["coil_current", "shots", "atom_number", "atom_number_scatter"]
    assert len(lines) == 31


@pytest.mark.parametrize("command", ["shots", "scans"])
def test_nothing_like_that_is_not_nothing_yet(command: str, heron: Path, run: Run) -> None:
    none = run("--store", heron / "heron.sqlite", command, "--since", "2031-01-01")
    assert f"no {command} like that" in none.err
    run("new")
    assert f"no {command} yet" in run(command).err


def test_edits_are_a_list(heron: Path, run: Run) -> None:
    assert isinstance(decoded(run("--store", heron / "heron.sqlite", "edits", "--json"))["edits"], list)


# ---------------------------------------------------------------- changing


def test_set_aside_and_put_back(copy: Path, run: Run) -> None:
    uid = "heron-20260928-0003"
    store = ("--store", copy)
    assert decoded(run(*store, "set-aside", uid, "--reason", "laser off lock", "--json"))["set_aside"] == 1
    shot = decoded(run(*store, "shots", uid, "--json"))["shot"]
    assert shot["set_aside"] == "laser off lock"
    assert "1 were so already" in run(*store, "set-aside", uid, "--reason", "again").out
    assert decoded(run(*store, "set-aside", uid, "--put-back", "--json"))["put_back"] == 1
    assert decoded(run(*store, "shots", uid, "--json"))["shot"]["set_aside"] is None


def test_upgrade_of_a_store_of_today(copy: Path, run: Run) -> None:
    document = decoded(run("--store", copy, "upgrade", "--json"))
    assert document["before"] == document["after"]
    assert document["copy"] is None


def test_export(heron: Path, run: Run, at_home: Path) -> None:
    store = ("--store", heron / "heron.sqlite")
    document = decoded(run(*store, "export", "loss-coarse", "loss.nc", "--json"))
    assert document["format"] == "netCDF"
    import xarray

    with xarray.open_dataset(at_home / "loss.nc", engine="h5netcdf") as dataset:
        assert dataset["atom_number"].attrs["units"]
        assert dataset.sizes["coil_current"] == 31
    refused = run(*store, "export", "loss-coarse", "loss.nc")
    assert refused.code == 2
    assert "--force" in refused.err
    assert run(*store, "export", "loss-coarse", "loss.csv").code == 0
    assert (at_home / "loss.csv").read_text().startswith("uid,")
    assert run(*store, "export", "loss-coarse", "loss.csv", "--force").code == 0
    assert sorted(path.name for path in at_home.iterdir()) == ["loss.csv", "loss.nc"]


def test_an_exported_table_can_be_taken_again(heron: Path, run: Run, at_home: Path) -> None:
    run("--store", heron / "heron.sqlite", "export", "loss-coarse", "loss.csv")
    head = (at_home / "loss.csv").read_text().split("\n")[0].split(",")
    assert "coil_current [A]" in head
    assert "atom_number [atoms]" in head
    assert "atom_number_stderr [atoms]" in head
    words = [
        "--machine",
        "heron",
        "--sequence",
        "hold-in-trap",
        "--scan",
        "loss-coarse",
        "--swept",
        "coil_current",
    ]
    settings = ["--parameters", "shot_id,set_aside", "--observables", "rest"]
    answer = run("take", "loss.csv", *words, *settings, "--new", "--json")
    assert answer.code == 0, answer.err
    assert decoded(answer)["new"] == 61
    scan = decoded(run("scan", "loss-coarse", "--json"))["scan"]
    assert (scan["shots"], scan["axes"][0]["unit"]) == (61, "A")


@pytest.mark.parametrize("name", ["loss.nc", "loss.csv"])
def test_export_into_a_folder_that_is_not_there(name: str, heron: Path, run: Run) -> None:
    answer = run("--store", heron / "heron.sqlite", "export", "loss-coarse", f"gone/{name}")
    assert answer.code == 3
    assert f"nightfold: gone/{name}: there is no folder 'gone'; make it, or name another one" in answer.err


@pytest.mark.parametrize("name", ["loss.nc", "loss.csv"])
def test_export_that_cannot_be_written_says_why(name: str, heron: Path, run: Run, at_home: Path) -> None:
    (at_home / f"{name}.part").mkdir()
    answer = run("--store", heron / "heron.sqlite", "export", "loss-coarse", name)
    assert answer.code == 5
    assert answer.err.split("\n")[1].startswith(f"nightfold: {name}")
    assert "errno" not in answer.err


def test_messages_of_several_lines_become_one() -> None:
    from nightfold.errors import StoreError
    from nightfold_cli.failures import explain

    assert explain(StoreError("no answer\n\tIs it running?\n")) == ("no answer; Is it running?", 5)


# ---------------------------------------------------------------- fitting


def test_fit(copy: Path, run: Run) -> None:
    answer = run(
        "--store", copy, "fit", "loss-coarse", "lorentzian", "gaussian", "-o", "atom_number", "--json"
    )
    assert answer.code == 0
    fits = decoded(answer)["fits"]
    assert [fit["model"] for fit in fits] == ["lorentzian", "gaussian"]
    fit = fits[0]
    keys = {"scan", "model", "observable", "slice", "estimates", "trusted", "warnings", "shots", "set_aside"}
    assert keys <= set(fit)
    assert (fit["scan"], fit["slice"], fit["shots"]) == ("loss-coarse#1", {}, 61)
    center = fit["estimates"]["center"]
    assert set(center) == {"value", "stderr", "interval68", "interval95", "unit"}
    assert center["interval95"][0] < center["interval68"][0] < center["value"]
    assert center["unit"] == "A"
    kept = decoded(run("--store", copy, "fits", "loss-coarse", "--json"))["fits"]
    assert [item["model"] for item in kept] == ["lorentzian", "gaussian"]
    assert kept[0]["estimates"]["center"]["value"] == pytest.approx(center["value"])


def test_fit_that_is_not_kept(copy: Path, run: Run) -> None:
    words = [
        "fit",
        "loss-coarse",
        "lorentzian",
        "--plain",
        "--background",
        "sloped",
        "--fixed",
        "fwhm=0.92",
        "--no-keep",
        "--json",
    ]
    fit = decoded(run("--store", copy, *words))["fits"][0]
    assert fit["estimates"]["fwhm"]["value"] == 0.92
    assert fit["estimates"]["fwhm"]["stderr"] == 0
    assert "slope" in fit["estimates"]
    assert decoded(run("--store", copy, "fits", "--json"))["fits"] == []


def test_fit_slice_by_slice(copy: Path, run: Run) -> None:
    words = ["fit", "evaporation-map", "gaussian", "--along", "evaporate#3.end_power", "--no-keep", "--json"]
    fits = decoded(run("--store", copy, *words))["fits"]
    assert len(fits) == 5
    assert list(fits[0]["slice"]) == ["evaporate#3.duration"]
    assert all(fit["along"] == "evaporate#3.end_power" for fit in fits)


def test_fit_in_a_pipe_warns_on_stderr(copy: Path, run: Run) -> None:
    words = ("fit", "loss-coarse", "lorentzian", "gaussian", "-o", "temperature", "--no-keep")
    answer = run("--store", copy, *words)
    head, *lines = answer.out.splitlines()
    assert head.split("\t")[:5] == ["model", "slice", "estimate", "value", "stderr"]
    assert {line.split("\t")[0] for line in lines} == {"lorentzian", "gaussian"}
    assert {line.count("\t") for line in lines} == {head.count("\t")}
    assert "lorentzian: do not trust this: no-feature: " in answer.err
    sliced = run(
        "--store", copy, "fit", "evaporation-map", "gaussian", "--along", "evaporate#3.end_power", "--no-keep"
    )
    assert sliced.out.splitlines()[1].split("\t")[1] == "evaporate#3.duration 0.8"


def test_demo_refuses_a_folder_in_use(run: Run, at_home: Path) -> None:
    (at_home / "nightfold-demo").mkdir()
    (at_home / "nightfold-demo" / "mine.txt").touch()
    answer = run("demo")
    assert answer.code == 2
    assert "not empty" in answer.err


def test_in_a_process_of_its_own(heron: Path, in_a_process: Run) -> None:
    answer = in_a_process("nights", "--json", NIGHTFOLD_STORE=str(heron / "heron.sqlite"))
    assert answer.code == 0
    assert decoded(answer)["nights"]


@pytest.mark.parametrize(("revision", "said"), [("9999", "newer"), ("0000", "upgrade")])
def test_store_of_another_revision(revision: str, said: str, copy: Path, run: Run) -> None:
    with sqlite3.connect(copy) as connection:
        connection.execute("UPDATE alembic_version SET version_num = ?", [revision])
    connection.close()
    answer = run("--store", copy, "nights")
    assert answer.code in (4, 5)
    assert revision in answer.err or said in answer.err
    assert answer.out == ""


def test_piped_lists_are_tables_of_one_width(copy: Path, run: Run) -> None:
    store = ("--store", copy)
    run(*store, "fit", "loss-coarse", "lorentzian")
    for words in ("fits", "scans", "nights", "edits", "shots -o atom_number", "scan loss-coarse", "models"):
        head, *lines = run(*words.split(), *store[:2] if words != "models" else ()).out.splitlines()
        assert {line.count("\t") for line in lines} <= {head.count("\t")}, words
    head, first, *_ = run(*store, "fits").out.splitlines()
    row = dict(zip(head.split("\t"), first.split("\t"), strict=True))
    assert (row["scan"], row["estimate"], row["trusted"], row["stale"]) == (
        "loss-coarse#1",
        "center",
        "true",
        "false",
    )
    assert float(row["low95"]) < float(row["value"]) < float(row["high95"])


def test_a_fit_goes_stale_when_its_shots_change(copy: Path, run: Run) -> None:
    store = ("--store", copy)
    run(*store, "fit", "loss-coarse", "lorentzian")
    shots = decoded(run(*store, "shots", "--scan", "loss-coarse", "--json"))["shots"]
    run(*store, "set-aside", shots[0]["uid"], "--reason", "test")
    assert decoded(run(*store, "fits", "--json"))["fits"][0]["stale"] is True


def test_new_says_what_to_do_next(run: Run, at_home: Path, heron: Path) -> None:
    assert "A card to fill in: egret.toml" in run("new", "--machine", "egret").out
    said = run("--store", "other.sqlite", "new", "--card", heron / "heron.toml").out
    card = tomllib.loads((heron / "heron.toml").read_text())
    counts = f"{len(card['parameters'])} parameters, {len(card['observables'])} observables, 2 derived"
    assert f"Machine heron: {counts}." in said
    wrong = run("--store", "third.sqlite", "new", "--card", at_home / "gone.toml")
    assert wrong.code == 5
    assert not (at_home / "third.sqlite").exists()


def test_upgrade_says_there_is_nothing_to_do(copy: Path, run: Run) -> None:
    assert "Nothing to do: the store is at revision" in run("--store", copy, "upgrade").out


def test_refused_files_are_counted_apart(run: Run, at_home: Path) -> None:
    (at_home / "odd.xyz").write_text("?")
    answer = run("take", "odd.xyz", at_home, "--new")
    assert answer.code == 5
    assert "the suffix '.xyz'" in answer.err
    assert "a folder" in answer.err
    assert "mend" not in answer.err
