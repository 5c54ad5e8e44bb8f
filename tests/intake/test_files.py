from __future__ import annotations

import os
from pathlib import Path

import pytest

from nightfold.errors import NotFound, RecordError
from nightfold.intake.csvfile import CsvColumns
from nightfold.intake.files import read_file

OPTIONS = CsvColumns(machine="heron", sequence="hold", parameters=("x",), observables=("y",))


@pytest.mark.parametrize("name", ["a.jsonl", "a.ndjson", "a.json", "A.JSONL"])
def test_json_by_suffix(tmp_path: Path, name: str) -> None:
    path = tmp_path / name
    path.write_text('{"a": 1}\n{"b": 2}\n')
    items = list(read_file(str(path)))
    assert [item.record for item in items] == [{"a": 1}, {"b": 2}]
    assert items[0].source == str(path)


@pytest.mark.parametrize(("name", "mark"), [("a.csv", ","), ("a.tsv", "\t"), ("a.txt", ";"), ("a.dat", "\t")])
def test_tables_by_suffix(tmp_path: Path, name: str, mark: str) -> None:
    path = tmp_path / name
    cells = (("started", "x", "y"), ("2026-10-05T21:00:00Z", "1", "2"))
    path.write_text("\n".join(mark.join(row) for row in cells))
    (item,) = read_file(path, columns=OPTIONS)
    assert item.record is not None
    assert (item.record["parameters"], item.record["observables"]) == ({"x": 1}, {"y": 2})


def test_a_tsv_may_be_full_of_commas(tmp_path: Path) -> None:
    path = tmp_path / "a.tsv"
    path.write_text("started\tcoil, upper, inner, left\n2026-10-05T21:00:00Z\t1\n")
    (item,) = read_file(path, columns=CsvColumns(machine="heron", sequence="hold", parameters="rest"))
    assert item.record is not None
    assert item.record["parameters"] == {"coil, upper, inner, left": 1}


def test_what_is_no_file_of_records(tmp_path: Path) -> None:
    with pytest.raises(NotFound, match=r"none\.csv: there is no such file; check the name"):
        read_file(tmp_path / "none.csv")
    with pytest.raises(RecordError, match="found a folder, wanted a file of shot records"):
        read_file(tmp_path)
    for name, found in (
        ("a.xlsx", r"a\.xlsx: found the suffix '.xlsx', wanted one of .jsonl"),
        ("a", "no suffix"),
    ):
        (tmp_path / name).touch()
        with pytest.raises(RecordError, match=found):
            read_file(tmp_path / name)


def test_a_file_that_may_not_be_read(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    (tmp_path / "a.csv").touch()
    monkeypatch.setattr(os, "access", lambda *_: False)  # file modes do not bind the superuser
    with pytest.raises(RecordError, match="found a file that may not be read, wanted read permission"):
        read_file(tmp_path / "a.csv")
