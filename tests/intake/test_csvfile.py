from __future__ import annotations

import csv
import io
import math
import tracemalloc
from datetime import datetime
from pathlib import Path
from typing import Any
from zoneinfo import ZoneInfo

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from nightfold.card import parse_card
from nightfold.errors import ChoiceNeeded, RecordError
from nightfold.intake.csvfile import CsvColumns, read_csv
from nightfold.ledger.outcome import Incoming
from nightfold.records import ShotRecord, parse_record

PEAK = Path(__file__).parents[1] / "reference" / "lmfit_test_peak"
CARD = parse_card("""
machine = "heron"
[parameters.coil_current]
unit = "A"
[parameters.imaging_axis]
kind = "text"
[parameters."hold time"]
[parameters.repump_on]
[observables.atom_number]
unit = "atoms"
[observables.temperature]
""")
NEWCOMER = CsvColumns(
    machine="heron",
    sequence="hold",
    scan="first",
    swept=("x",),
    observables="rest",
    started_at="2026-10-05T21:00:00+02:00",
)
T = "2026-10-05T21:14:03+02:00"


@pytest.fixture
def path(tmp_path: Path) -> Path:
    return tmp_path / "night.csv"


def read(path: Path, data: str | bytes, columns: CsvColumns | None = None, **card: Any) -> list[Incoming]:
    path.write_bytes(data if isinstance(data, bytes) else data.encode())
    return list(read_csv(path, columns=columns, **card))


def records(items: list[Incoming]) -> list[Any]:
    assert [item.problem for item in items] == [None] * len(items)
    return [item.record for item in items]


def test_a_whole_table_by_the_card(path: Path) -> None:
    data = (
        "uid,started,sequence,scan,coil_current [A],hold time [ms],imaging_axis,repump_on,"
        "atom_number,atom_number_stderr,temperature [nK],temperature stderr [nK],atom_number[up],"
        "reference,failed,note\n"
        f"s1,{T},hold,loss,61.25,120,1,TRUE,121000,3100,412,7,60000,,,\n"
        f's2,{T},hold,,-61,,2,false,,3100,nan,,1e3,1,no atoms,"a, b"\n'
    )
    first, second = records(read(path, data, card=CARD))
    assert first == {
        "format": 1,
        "machine": "heron",
        "uid": "s1",
        "started": T,
        "sequence": "hold",
        "scan": "loss",
        "reference": False,
        "parameters": {
            "coil_current": {"value": 61.25, "unit": "A"},
            "hold time": {"value": 120, "unit": "ms"},
            "imaging_axis": "1",
            "repump_on": True,
        },
        "observables": {
            "atom_number": {"value": 121000, "stderr": 3100},
            "temperature": {"value": 412, "stderr": 7, "unit": "nK"},
            "atom_number[up]": 60000,
        },
    }
    assert "scan" not in second
    assert (second["reference"], second["failed"], second["note"]) == (True, "no atoms", "a, b")
    assert second["parameters"] == {
        "coil_current": {"value": -61, "unit": "A"},
        "imaging_axis": "2",
        "repump_on": False,
    }
    assert second["observables"]["atom_number"] is None
    assert math.isnan(second["observables"]["temperature"]["value"])
    assert isinstance(parse_record(first), ShotRecord)
    assert isinstance(parse_record(second), ShotRecord)


@pytest.mark.parametrize(
    "data", ["x,y\n1,10\n2,20\n", "# by hand\n\nx;y\r\n1;10\r\n2;20\r\n", "x\ty\n1\t10\n2\t20"]
)
def test_a_newcomers_two_columns(path: Path, data: str) -> None:
    first, second = records(read(path, data, NEWCOMER))
    assert first == {
        "format": 1,
        "machine": "heron",
        "sequence": "hold",
        "scan": "first",
        "started": "2026-10-05T19:00:00+00:00",
        "swept": ["x"],
        "parameters": {"x": 1},
        "observables": {"y": 10},
    }
    assert second["started"] == "2026-10-05T19:00:10+00:00"


def test_a_measured_peak_parted_by_spaces() -> None:
    # Source: lmfit examples (SOURCE.md beside the file); parted by spaces, named by the last comment line.
    columns = CsvColumns(machine="bench", sequence="peak", swept=("t",), observables=("y",), started_at=T)
    items = list(read_csv(PEAK / "test_peak.dat", columns=columns))
    assert (len(items), items[0].line, items[-1].line) == (401, 4, 404)
    rows = records(items)
    assert (rows[0]["parameters"], rows[0]["observables"]) == ({"t": 0.0}, {"y": 0.021654})
    assert (rows[-1]["parameters"], rows[-1]["observables"]) == ({"t": 20.0}, {"y": -0.091474})
    named = CsvColumns(
        machine="bench",
        sequence="peak",
        names=("time [s]", "height"),
        parameters=("time",),
        observables="rest",
        delimiter=" ",
        started_at=T,
    )
    first = records(list(read_csv(PEAK / "test_peak.dat", columns=named)))[0]
    assert first["parameters"] == {"time": {"value": 0.0, "unit": "s"}}
    assert first["observables"] == {"height": 0.021654}


def test_comment_header_with_units(path: Path) -> None:
    for data in ("# x [ms] y [nK]\n1 2\n", "#x [ms], y [nK]\n1, 2\n"):
        (record,) = records(read(path, data, NEWCOMER))
        assert record["parameters"] == {"x": {"value": 1, "unit": "ms"}}
        assert record["observables"] == {"y": {"value": 2, "unit": "nK"}}


@pytest.mark.parametrize("data", ["1,2\n3,4\n", "# x\n1,2\n", "1 2\n"])
def test_no_header_at_all(path: Path, data: str) -> None:
    with pytest.raises(RecordError, match=r"night\.csv:\d: found numbers \(1, 2\), wanted a header line"):
        read(path, data, NEWCOMER)


def test_a_header_that_cannot_be_read(path: Path) -> None:
    with pytest.raises(RecordError, match=r"night\.csv:2: found byte 0xe9 at offset 5 of the line"):
        read(path, b"# by hand\nx,caf\xe9\n1,2\n", NEWCOMER)


def test_a_whole_number_without_end(path: Path) -> None:
    (item,) = read(path, "x,y\n" + "1" * 5000 + ",1\n", NEWCOMER)
    assert str(item.problem) == "x: found a whole number of 5000 digits, wanted at most 4300 digits"


@pytest.mark.parametrize("data", ["", "\n", "# only words\n\n", "\ufeff", "x,y\n", "x,y\n,\n\n"])
def test_no_rows(path: Path, data: str) -> None:
    assert read(path, data, NEWCOMER) == []


@pytest.mark.parametrize(
    ("cell", "value"),
    [
        ("1", 1),
        ("007", 7),
        ("-1.50", -1.5),
        ("+.5", 0.5),
        ("5.", 5.0),
        ("1e-3", 0.001),
        ("9007199254740993", 9007199254740993),
        ("inf", math.inf),
        ("-Infinity", -math.inf),
        ("True", True),
        ("FALSE", False),
        ("x axis", "x axis"),
        (" 3 ", 3),
        ("1_000", "1_000"),
        ("0x10", "0x10"),
        ('"he said ""no"" 🪶"', 'he said "no" 🪶'),
        ('"a\nb"', "a\nb"),
    ],
)
def test_cells(path: Path, cell: str, value: object) -> None:
    (record,) = records(read(path, f"x,y\n{cell},1\n", NEWCOMER))
    assert record["parameters"]["x"] == value
    assert type(record["parameters"]["x"]) is type(value)


def test_empty_cells_are_absent_settings_and_null_readings(path: Path) -> None:
    (record,) = records(read(path, "x,y,z,z_stderr\n,,1,\n", NEWCOMER))
    assert (record["parameters"], record["observables"]) == ({}, {"y": None, "z": 1})
    assert "swept" not in record


def test_lines_and_bytes_with_quoted_line_ends(path: Path) -> None:
    data = '\ufeffx,y\r\n"1\r\n\r\n#no comment",1\r\n# a comment\r\n\r\n2,2\r\n3,3'.encode()
    items = read(path, data, NEWCOMER)
    assert [item.line for item in items] == [2, 7, 8]
    assert [data[item.byte : item.byte + 2] for item in items] == [b'"1', b"2,", b"3,"]
    assert records(items)[0]["parameters"]["x"] == "1\r\n\r\n#no comment"


def test_rows_that_cannot_be_read(path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("nightfold.intake.lines.LONGEST_LINE", 60)
    data = b"\n".join(
        [
            *(
                b"x;y;failed;reference",
                b"1;1;;",
                b"2;2",
                b"3;3;;;;;;",
                b"4,5;4;;",
                b"caf\xe9;5;;",
                b"6;6;;maybe",
            ),
            *(b"7;" + b"7" * 80 + b";;", b'"8"8;8;;', b"9;9;;yes", b'"10;10;;', b"11;11;;"),
        ]
    )
    items = read(path, data, NEWCOMER)
    assert [item.line for item in items] == [2, 3, 4, 5, 6, 7, 8, 9, 10, 11]
    assert [item.record is None for item in items] == [False, *[True] * 7, False, True]
    texts = [str(item.problem) for item in items if item.problem]
    assert texts[0] == "found 2 cells, wanted 4, as many as the header names"
    assert texts[1] == "found 8 cells, wanted 4, as many as the header names; are there decimal commas?"
    assert texts[2].startswith("x: found '4,5', a decimal comma, wanted a decimal point, 4.5")
    assert "found byte 0xe9 at offset 3 of the line, after 'caf' ('é' in Latin-1), wanted UTF-8" in texts[3]
    assert texts[4] == "reference: found 'maybe', wanted true or false"
    assert "found a line of 85 bytes that starts '7;777" in texts[5]
    assert "found a row that cannot be split" in texts[6]
    assert "found a row that, up to line 12, cannot be split" in texts[7]


def test_synthetic_times_do_not_depend_on_good_rows(path: Path) -> None:
    options = CsvColumns(
        machine="heron", sequence="hold", parameters="rest", cycle_s=0.5,
        started_at=datetime(2026, 10, 25, 1, 59, 59, tzinfo=ZoneInfo("Europe/Vienna")),
    )  # fmt: skip
    items = read(path, "x\n1\n2,2\n3\n", options)
    assert [item.record and item.record["started"] for item in items] == [
        "2026-10-24T23:59:59+00:00",
        None,
        "2026-10-25T00:00:00+00:00",
    ]


@pytest.mark.parametrize(
    ("cell", "reason"),
    [("", None), ("0", None), ("false", None), ("1", "marked as failed"), ("dark", "dark")],
)
def test_failed_shots(path: Path, cell: str, reason: str | None) -> None:
    (record,) = records(read(path, f"x,y,failed\n1,1,{cell}\n", NEWCOMER))
    assert record.get("failed") == reason


@pytest.mark.parametrize(
    ("header", "message"),
    [
        ("x,y,x", "x: found two columns of this name, wanted each name once"),
        ("x [A],x [mA],y", "x: found two columns of this name"),
        ("x,,y", "column 2: found '', wanted a name of 1 to 200 printable characters in the header"),
        ("x [Amp re],y", "x: found unit 'Amp re', wanted a unit that is known"),
        ("x,x_stderr,y", "x_stderr: found a standard uncertainty of a column that is no observable"),
        ("x,y [A],y stderr [mA]", "y_stderr: found unit 'mA', while y has 'A', wanted the same unit"),
        ("x,y,y_stderr,y stderr", "y_stderr: found two columns of it"),
    ],
)
def test_headers_that_are_wrong(path: Path, header: str, message: str) -> None:
    with pytest.raises(RecordError) as problem:
        read(path, f"{header}\n1,2,3,4\n", NEWCOMER)
    assert message in str(problem.value)


@pytest.mark.parametrize(
    ("data", "options", "message"),
    [
        (
            "x,y,z\n",
            {"swept": ("x",)},
            "what these columns are: 'y', 'z'; say --observables y,z, or --parameters y,z for settings that rested",
        ),
        ("x,y_stderr\n", {"parameters": "rest"}, "what these columns are: 'y_stderr'"),
        ("x,coil[A]\n", {"swept": ("x",)}, "if the bracket of 'coil[A]' holds a unit, put a space before it"),
        (
            "x y\n1 2\n",
            {},
            "'x y'; say --swept 'x y', --observables 'x y', or --parameters 'x y' for settings that rested",
        ),
        (
            "x,y,z\n",
            {},
            "'x', 'y', 'z'; say for example --swept x --observables y,z; --parameters names settings that rested",
        ),
        ("x y\n1 2\n", {}, "if the columns are parted by spaces, say so with the delimiter"),
        ("a,b\n", {"observables": "rest", "swept": ("x",)}, "swept names 'x', but the columns are a, b"),
        ("x\n", {"observables": "rest", "parameters": "rest"}, "cannot both be the rest"),
        ("x\n", {"parameters": "rest", "machine": None}, "no column 'machine'; state the machine"),
        ("x\n", {"parameters": "rest", "sequence": None}, "no column 'sequence'; state the sequence"),
        (
            "x\n",
            {"parameters": "rest", "started_at": None},
            "no column 'started'; name the column with the time",
        ),
        (
            "x,started\n",
            {"parameters": "rest"},
            "times stand in the column 'started', and started_at is stated",
        ),
    ],
)
def test_what_must_be_stated(path: Path, data: str, options: dict[str, Any], message: str) -> None:
    stated: dict[str, Any] = {"machine": "heron", "sequence": "hold", "started_at": T} | options
    with pytest.raises(ChoiceNeeded) as problem:
        read(path, data, CsvColumns(**stated))
    assert str(problem.value).startswith(str(path))
    assert message in str(problem.value)


@pytest.mark.parametrize(
    ("started_at", "cycle_s", "message"),
    [
        (
            "2026-10-05T21:00",
            1.0,
            "started_at: found 2026-10-05T21:00:00, without an offset, wanted an ISO 8601 time",
        ),
        ("yesterday", 1.0, "started_at: found 'yesterday', wanted an ISO 8601 time"),
        (T, 0.0, "cycle_s: found 0.0, wanted seconds between rows, more than 0"),
        (T, math.nan, "cycle_s: found nan"),
    ],
)
def test_synthetic_times_that_are_none(path: Path, started_at: str, cycle_s: float, message: str) -> None:
    options = CsvColumns(machine="a", sequence="b", parameters="rest", started_at=started_at, cycle_s=cycle_s)
    with pytest.raises(RecordError) as problem:
        read(path, "x\n1\n", options)
    assert message in str(problem.value)


def test_options_go_before_reserved_names_and_other_names_can_be_given(path: Path) -> None:
    options = CsvColumns(
        machine="heron", sequence="hold", parameters=("note", "coil [A]"), observables=("scan",),
        started="when", uid="run number",
    )  # fmt: skip
    data = f"when,run number,note,coil [A],scan\n{T},17,5,6,7\n"
    (record,) = records(read(path, data, options))
    assert (record["started"], record["uid"]) == (T, "17")
    assert record["parameters"] == {"note": 5, "coil": {"value": 6, "unit": "A"}}
    assert record["observables"] == {"scan": 7}


def test_columns_go_before_options_row_by_row(path: Path) -> None:
    options = CsvColumns(machine="heron", sequence="hold", scan="all", started_at=T, parameters="rest")
    first, second = records(read(path, "machine,sequence,scan,x\negret,expand,one,1\n,,,2\n", options))
    assert (first["machine"], first["sequence"], first["scan"]) == ("egret", "expand", "one")
    assert (second["machine"], second["sequence"], second["scan"]) == ("heron", "hold", "all")


def test_memory_does_not_grow_with_the_file(path: Path) -> None:
    names = [f"p{n}" for n in range(60)]
    path.write_text(",".join(names) + "\n" + (",".join("1.2345678" for _ in names) + "\n") * 4000)
    assert path.stat().st_size > 2_000_000
    options = CsvColumns(machine="heron", sequence="hold", parameters="rest", started_at=T)
    next(read_csv(path, columns=options))
    tracemalloc.start()
    count = sum(item.record is not None for item in read_csv(path, columns=options))
    _, peak = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    assert count == 4000
    assert peak < 500_000


CELLS = st.integers().map(str) | st.floats().map(repr) | st.text("abc,;\"'\n\t #é🪶", max_size=6)


@settings(max_examples=150, suppress_health_check=[HealthCheck.function_scoped_fixture], deadline=None)
@given(
    rows=st.lists(st.tuples(CELLS, st.integers()), max_size=6),
    mark=st.sampled_from([",", ";", "\t"]),
    end=st.sampled_from(["\n", "\r\n"]),
)
def test_what_the_csv_writer_writes_comes_back(
    tmp_path: Path, rows: list[tuple[str, int]], mark: str, end: str
) -> None:
    text = io.StringIO()
    writer = csv.writer(text, delimiter=mark, lineterminator=end, quoting=csv.QUOTE_ALL)
    writer.writerows([("label", "y"), *rows])
    card = parse_card('machine = "heron"\n[parameters.label]\nkind = "text"\n[observables.y]')
    options = CsvColumns(sequence="hold", started_at=T)
    back = records(read(tmp_path / "round.csv", text.getvalue(), options, card=card))
    assert [record["parameters"].get("label", "") for record in back] == [label.strip() for label, _ in rows]
    assert [record["observables"]["y"] for record in back] == [value for _, value in rows]


@settings(max_examples=150, suppress_health_check=[HealthCheck.function_scoped_fixture], deadline=None)
@given(data=st.binary(max_size=60))
def test_no_bytes_make_it_stumble(tmp_path: Path, data: bytes) -> None:
    items = read(tmp_path / "any.csv", b"x,y\n" + data, NEWCOMER)
    assert all((item.record is None) is (item.problem is not None) for item in items)
    assert len({item.byte for item in items}) == len(items)
