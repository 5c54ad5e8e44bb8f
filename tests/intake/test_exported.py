"""A table that `export` wrote is read back: into its store, which knows its shots, and into another one."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from nightfold.intake.csvfile import CsvColumns
from nightfold.opening import create_store, open_store
from nightfold.store import Store
from nightfold_cli.main import main

HEAD = "uid,machine,sequence,scan,shot_id,started,set_aside,coil [A],n,n_stderr"


@pytest.fixture
def taken(anywhere: str) -> Iterator[tuple[Store, str]]:
    """Return a store with a scan of four shots, on each engine, and where it is."""
    with open_store(anywhere) as store:
        store.take(
            {
                "machine": "heron", "uid": f"u{k}", "started": f"2026-10-05T20:00:0{k}.25+00:00", "sequence": "hold",
                "scan": "loss", "swept": ["coil"], "derivation": "fit",
                "parameters": {"coil": {"value": 0.1 * k, "unit": "A"}, "hold": 20, "axis": "x"},
                "observables": {"n": {"value": 1 / (k + 3), "stderr": 0.1}, "m": None if k == 2 else 5},
            }
            for k in range(4)
        )  # fmt: skip
        yield store, anywhere


@pytest.fixture
def exported(taken: tuple[Store, str], tmp_path: Path) -> Path:
    path = tmp_path / "loss.csv"
    assert main(["--store", taken[1], "export", "loss", str(path)]) == 0
    return path


def reading(store: Store, uid: str, name: str) -> Any:
    return store.shot(uid).observables[name]


def test_the_shots_are_known_in_their_store(taken: tuple[Store, str], exported: Path) -> None:
    outcome = taken[0].take_file(exported)
    assert (outcome.new, outcome.known, outcome.amended, outcome.refused) == (0, 4, 0, [])
    assert reading(taken[0], "u1", "n").derivation == "fit"


def test_a_column_added_is_taken(taken: tuple[Store, str], exported: Path) -> None:
    head, *rows = exported.read_text().splitlines()
    exported.write_text("\n".join([f"{head},q", *(f"{row},{k}" for k, row in enumerate(rows))]))
    outcome = taken[0].take_file(exported, columns=CsvColumns(observables=("q",)))
    assert (outcome.amended, outcome.refused) == (4, [])
    assert reading(taken[0], "u3", "q").value == 3.0
    assert taken[0].take_file(exported).known == 4


@pytest.mark.parametrize(
    ("old", "new", "reason"),
    [
        ("0.1,5.0", "0.1,6", "observables.m: found 6.0, wanted 5.0, as stored"),
        ("20:00:01", "20:00:31", "started: found '2026-10-05T20:00:31"),
        ("False,0.1,", "False,0.15,", "parameters.coil: found 0.15, wanted 0.1, as stored"),
        ("u1,heron,hold", "u1,heron,other", "sequence: found 'other'"),
    ],
)
def test_what_differs_is_refused(
    taken: tuple[Store, str], exported: Path, old: str, new: str, reason: str
) -> None:
    lines = exported.read_text().splitlines()
    place = next(k for k, line in enumerate(lines) if line.startswith("u1"))
    assert old in lines[place]
    lines[place] = lines[place].replace(old, new)
    exported.write_text("\n".join(lines))
    outcome = taken[0].take_file(exported)
    assert (outcome.new, outcome.known, outcome.amended) == (0, 3, 0)
    (refused,) = outcome.refused
    assert reason.replace("'2026", "2026") in refused.reason.replace("'2026", "2026")
    assert "changes nothing" in refused.reason


def test_into_another_store(taken: tuple[Store, str], exported: Path, tmp_path: Path) -> None:
    with create_store(tmp_path / "other.sqlite") as other:
        columns = CsvColumns(parameters=("coil",), observables="rest")
        assert other.take_file(exported, columns=columns).new == 4
        assert other.scan("loss").shots == 4
        assert reading(other, "u1", "n").value == 0.25
        assert other.take_file(exported).known == 4


def test_columns_of_ratios_are_left_out(taken: tuple[Store, str], tmp_path: Path) -> None:
    path = tmp_path / "relative.csv"
    path.write_text(
        f"{HEAD},n_relative,n_relative_stderr,n_relative[up]\n"
        "u1,heron,hold,loss,2,2026-10-05T20:00:01.25+00:00,False,0.1,0.25,0.1,0.9,0.1,0.8\n"
    )
    assert taken[0].take_file(path).known == 1
