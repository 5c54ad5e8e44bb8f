from __future__ import annotations

import json
import math
import tracemalloc
from pathlib import Path
from typing import Any

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from nightfold.errors import RecordError
from nightfold.intake import lines
from nightfold.intake.jsonlines import read_json_lines
from nightfold.ledger.outcome import Incoming


def read(path: Path, data: bytes, **options: int) -> list[Incoming]:
    path.write_bytes(data)
    return list(read_json_lines(path, **options))


@pytest.fixture
def path(tmp_path: Path) -> Path:
    return tmp_path / "night.jsonl"


def why(incoming: Incoming) -> str:
    assert incoming.record is None
    assert incoming.problem is not None
    return str(incoming.problem)


def test_lines_and_bytes_are_counted(path: Path) -> None:
    first, second, third = read(path, b'{"a": 1}\n\n  \r\n{"b": 2}\n{"c": "\xe2\x82\xac"}')
    assert (first.record, first.source, first.line, first.byte) == ({"a": 1}, str(path), 1, 0)
    assert (second.record, second.line, second.byte) == ({"b": 2}, 4, 14)
    assert (third.record, third.line, third.byte, third.problem) == ({"c": "€"}, 5, 23, None)


def test_byte_order_mark_and_windows_line_ends(path: Path) -> None:
    first, second = read(path, b'\xef\xbb\xbf{"a": 1}\r\n{"b": 2}\r\n')
    assert (first.record, first.line, first.byte) == ({"a": 1}, 1, 3)
    assert (second.record, second.line, second.byte) == ({"b": 2}, 2, 13)
    assert path.read_bytes()[second.byte :].startswith(b'{"b"')


@pytest.mark.parametrize("data", [b"", b"\n", b"\xef\xbb\xbf", b"\xef\xbb\xbf\r\n", b"  \n\n"])
def test_an_empty_file_yields_nothing(path: Path, data: bytes) -> None:
    assert read(path, data) == []


def test_numbers_are_exact(path: Path) -> None:
    (one,) = read(path, b'{"big": 9007199254740993, "n": NaN, "i": Infinity, "m": -Infinity, "t": true}')
    assert one.record is not None
    assert one.record["big"] == 9007199254740993
    assert math.isnan(one.record["n"])
    assert (one.record["i"], one.record["m"], one.record["t"]) == (math.inf, -math.inf, True)
    assert type(one.record["big"]) is int
    assert one.record["t"] is True


@pytest.mark.parametrize(
    "cut",
    [b'{"a": 1', b'{"a": tr', b'{"a": "\xc3', b'{"a": "\\u00', b'{"a', b"{", b'{"a": 1.', b'{"a": {"b": 1}'],
)
def test_a_truncated_last_line(path: Path, cut: bytes) -> None:
    good, torn = read(path, b'{"a": 1}\n' + cut)
    assert good.record == {"a": 1}
    assert "the last line is cut off" in why(torn)
    assert (torn.line, torn.byte) == (2, 9)


def test_a_last_line_without_line_end_is_taken_when_whole(path: Path) -> None:
    assert [item.record for item in read(path, b'{"a": 1}\n{"b": 2}')] == [{"a": 1}, {"b": 2}]


def test_latin_1_bytes_name_their_offset(path: Path) -> None:
    bad, good = read(path, b'{"note": "caf\xe9 au lait"}\n{"a": 1}\n')
    assert why(bad) == (
        "found byte 0xe9 at offset 13 of the line, after '{\"note\": \"caf' ('é' in Latin-1), "
        "wanted UTF-8 text; save the file as UTF-8"
    )
    assert good.record == {"a": 1}


@pytest.mark.parametrize(
    ("line", "found"),
    [
        (b"[1, 2]", "found an array, '[1, 2]', wanted one JSON object on each line"),
        (b"3", "found a number, '3'"),
        (b'"text"', "found a text"),
        (b"null", "found null"),
        (b"true", "found a truth value"),
        (b"hello", "found no JSON (expected value at column 1) near 'hello'"),
        (b'{"a": 1} {"b": 2}', "trailing characters at column 10"),
        (b"{'a': 1}", "found no JSON (key must be a string at column 2)"),
        (b'{"a": 1', "found no JSON (EOF while parsing an object at column 7)"),
        (b'{"a": "\\ud800"}', "found no JSON"),
        (b'{"a": ' + b"[" * 1000 + b"]" * 1000 + b"}", "recursion limit exceeded"),
        (b'{"a": ' + b"1" * 5000 + b"}", "number out of range"),
        (b'{"a": 1, "a": 2}', "a: found the key twice in one object, wanted each key once"),
        (b'{"parameters": {"b": {"value": 1, "value": 2}}}', "value: found the key twice"),
        (b'{"steps": [{"settings": {"c": 1, "c": 2}}]}', "c: found the key twice"),
        (b'{"c" : 1, "c" : 2}', "c: found the key twice"),
        (b"\x00\x00\x00", "found no JSON"),
    ],
)
def test_lines_that_are_no_record(path: Path, line: bytes, found: str) -> None:
    bad, good = read(path, line + b'\n{"a": 1}\n')
    assert found in why(bad)
    assert (good.record, good.line, good.byte) == ({"a": 1}, 2, len(line) + 1)


def test_colons_within_texts_are_no_keys(path: Path) -> None:
    record = {
        "note": 'he said "a": {"b": 1}',
        "frames": [{"camera": "x"}, {"camera": "x"}],
        "b": {"c": {"d": {}}},
    }
    (one,) = read(path, json.dumps(record).encode())
    assert (one.record, one.problem) == (record, None)


def test_utf_16_is_refused_by_name(path: Path) -> None:
    with pytest.raises(RecordError, match=r"night\.jsonl: found UTF-16 text, wanted UTF-8"):
        read(path, '{"a": 1}\n'.encode("utf-16"))


def test_reading_goes_on_at_an_offset(path: Path) -> None:
    data = b'\xef\xbb\xbf{"a": 1}\n{"b": 2}\n\n{"c": 3}\n'
    whole = read(path, data)
    for place, item in enumerate(whole[1:], start=1):
        assert read(path, data, start=item.byte, first_line=item.line) == whole[place:]
    assert read(path, data, start=len(data)) == []
    assert read(path, data, start=len(data) + 99) == []


def test_a_line_that_is_too_long(path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(lines, "LONGEST_LINE", 100)
    fits = b'{"a": "' + b"x" * 90 + b'"}\n'
    assert len(fits) == 100
    data = fits + b'{"long": "' + b"y" * 250 + b'"}\n{"b": 2}\n{"also": "' + b"z" * 300
    good, bad, after, last = read(path, data)
    assert good.record is not None
    assert 'found a line of 263 bytes that starts \'{"long": "yyy' in why(bad)
    assert (after.record, after.line, after.byte) == ({"b": 2}, 3, 363)
    assert "found a line of 310 bytes" in why(last)


def test_a_huge_line_is_not_held(path: Path) -> None:
    with path.open("wb") as file:  # a hole of 200 MB, which takes no room on the disk
        file.truncate(200_000_000)
        file.seek(0, 2)
        file.write(b'\n{"a": 1}\n')
    tracemalloc.start()
    bad, good = read_json_lines(path)
    _, peak = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    assert "found a line of 200000001 bytes" in why(bad)
    assert "wanted at most 16 MiB a line" in why(bad)
    assert (good.record, good.line) == ({"a": 1}, 2)
    assert peak < 40_000_000


def test_memory_does_not_grow_with_the_file(path: Path) -> None:
    line = json.dumps({"parameters": {f"p{n}": {"value": n / 7, "unit": "A"} for n in range(50)}}) + "\n"
    path.write_text(line * 6000)
    assert path.stat().st_size > 10_000_000
    tracemalloc.start()
    count = sum(item.record is not None for item in read_json_lines(path))
    _, peak = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    assert count == 6000
    assert peak < 1_000_000


NAMES = st.text(st.characters(exclude_categories=["Cs"]), max_size=12)
NUMBERS = st.integers() | st.floats(allow_nan=False)
LEAVES = st.none() | st.booleans() | NUMBERS | NAMES
RECORDS = st.dictionaries(
    NAMES,
    st.recursive(
        LEAVES, lambda inner: st.lists(inner, max_size=4) | st.dictionaries(NAMES, inner, max_size=4)
    ),
    max_size=6,
)


@settings(max_examples=60, suppress_health_check=[HealthCheck.function_scoped_fixture], deadline=None)
@given(
    records=st.lists(RECORDS, max_size=5),
    ascii_only=st.booleans(),
    end=st.sampled_from(["\n", "\r\n", "\n\n"]),
)
def test_what_json_dumps_writes_comes_back_equal(
    tmp_path: Path, records: list[dict[str, Any]], ascii_only: bool, end: str
) -> None:
    text = "".join(json.dumps(record, ensure_ascii=ascii_only) + end for record in records)
    items = read(tmp_path / "round.jsonl", text.encode())
    assert [item.problem for item in items] == [None] * len(records)
    back = [item.record for item in items]
    assert back == records
    assert repr(back) == repr(records)  # 1, 1.0 and True are told apart, and -0.0 from 0.0


@settings(max_examples=150, suppress_health_check=[HealthCheck.function_scoped_fixture], deadline=None)
@given(data=st.binary(max_size=60))
def test_no_bytes_make_it_stumble(tmp_path: Path, data: bytes) -> None:
    if data.startswith((b"\xff\xfe", b"\xfe\xff")):
        with pytest.raises(RecordError, match="UTF-16"):
            read(tmp_path / "any.jsonl", data)
        return
    items = read(tmp_path / "any.jsonl", data)
    assert all((item.record is None) is (item.problem is not None) for item in items)
    assert len({item.byte for item in items}) == len(items)
