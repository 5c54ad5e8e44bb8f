from __future__ import annotations

import json
from pathlib import Path

import pytest

from nightfold.errors import RecordError
from nightfold.intake import jsondocument
from nightfold.intake.files import read_file
from nightfold.intake.jsondocument import is_document, read_json_document
from nightfold.ledger.outcome import Incoming

RECORDS = [{"uid": "a", "note": "é 🪶"}, {"uid": "b", "n": 9007199254740993}, {"uid": "c"}]


@pytest.fixture
def path(tmp_path: Path) -> Path:
    return tmp_path / "night.json"


def read(path: Path, data: bytes) -> list[Incoming]:
    path.write_bytes(data)
    return list(read_file(path))


@pytest.mark.parametrize("indent", [None, 2])
@pytest.mark.parametrize("mark", [b"", b"\xef\xbb\xbf"])
def test_an_array_of_records(path: Path, indent: int | None, mark: bytes) -> None:
    text = json.dumps(RECORDS, indent=indent, ensure_ascii=False)
    items = read(path, mark + text.encode())
    assert is_document(path)
    assert [item.record for item in items] == RECORDS
    for item, record in zip(items, RECORDS, strict=True):
        rest = path.read_bytes()[item.byte :].decode()
        assert json.JSONDecoder().raw_decode(rest)[0] == record
        assert path.read_bytes()[: item.byte].count(b"\n") == item.line - 1


def test_printed_objects_one_after_another(path: Path) -> None:
    items = read(path, "\n".join(json.dumps(record, indent=4) for record in RECORDS).encode())
    assert [item.record for item in items] == RECORDS
    assert [item.line for item in items] == [1, 5, 9]


def test_json_lines_under_the_name_json(path: Path) -> None:
    data = "".join(json.dumps(record) + "\n" for record in RECORDS).encode()
    assert [item.record for item in read(path, data)] == RECORDS
    assert not is_document(path)


def test_a_broken_first_line_does_not_hide_the_others(path: Path) -> None:
    bad, good = read(path, b'{"a": tx}\n{"b": 1}\n')
    assert bad.problem is not None
    assert good.record == {"b": 1}


@pytest.mark.parametrize("data", [b"", b"[]", b" [ ] \n", b"\n\n"])
def test_nothing_in_it(path: Path, data: bytes) -> None:
    assert read(path, data) == []


def test_items_that_are_no_records(path: Path) -> None:
    good, bad, after = read(path, b'[{"a": 1},\n 17,\n {"b": 2}]')
    assert (good.record, after.record) == ({"a": 1}, {"b": 2})
    assert (str(bad.problem), bad.line) == ("found '17,\\n {\"b\": 2}]', wanted a JSON object", 2)


@pytest.mark.parametrize(
    ("data", "message"),
    [
        (b'[{"a": 1},\n{"b": ', "the file ends within a record that starts '{\"b\": '"),
        (b'[{"a": 1},\n{"b": x}]', "Expecting value: line 2 column 7 (char 17)"),
        (b'[{"a": 1}] rubbish', "Expecting value: line 1 column 10"),
        (b'[{"a": 1},\n{"b": 1, "b": 2}]', "b: found the key twice in one object"),
    ],
)
def test_faults_end_the_reading(path: Path, data: bytes, message: str) -> None:
    good, bad = read(path, data)
    assert good.record == {"a": 1}
    assert message in str(bad.problem)


def test_latin_1_names_the_line(path: Path) -> None:
    with pytest.raises(RecordError, match=r"night\.json:2: found byte 0xe9 at offset 12 of the line"):
        read(path, b'[\n  {"a": "caf\xe9"}]')


def test_size_is_limited(path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(jsondocument, "LONGEST_LINE", 10)
    path.write_text('[{"a": 12345}]')
    with pytest.raises(
        RecordError, match=r"printed object of 14 bytes, wanted .* as JSON lines: one object a line"
    ):
        list(read_json_document(path))
