"""Readings taken: every value once, whatever the order, on both engines; what is wrong is refused with its place."""

from __future__ import annotations

import json
import math
import sqlite3
from collections.abc import Iterator
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from nightfold.errors import CardError, ChoiceNeeded, NotFound, RecordError
from nightfold.opening import open_store
from nightfold.sensors import taking
from nightfold.store import Store

START = datetime(2026, 10, 5, 19, 58, tzinfo=UTC)
Record = dict[str, Any]


def moment(seconds: float) -> str:
    return (START + timedelta(seconds=seconds)).isoformat()


def record(seconds: float, **readings: Any) -> Record:
    return {"format": 1, "machine": "heron", "at": moment(seconds), "readings": readings}


def stored(store: Store, name: str, **chosen: Any) -> dict[float, float]:
    frame = store.sensor(name, **chosen)
    assert frame["at"].is_monotonic_increasing
    seconds = (frame["at"] - START).dt.total_seconds()
    return dict(zip(seconds.round(6).tolist(), frame["value"].tolist(), strict=True))


def lines(path: Path, records: list[Record]) -> Path:
    path.write_text("".join(json.dumps(record) + "\n" for record in records), encoding="utf-8")
    return path


def made(seconds: range, seed: int = 0) -> list[Record]:
    rng = np.random.default_rng(seed)
    return [
        record(k, room=round(21 + float(rng.normal()), 2), pressure=3e-11 * (1 + float(rng.normal()) / 50))
        for k in seconds
    ]


@pytest.fixture
def small_batches(monkeypatch: pytest.MonkeyPatch) -> None:
    """Take readings in batches of at most 7, so that hours are merged again and again."""
    monkeypatch.setattr(taking, "BATCH", 7)


def test_exact_values_on_both_engines(anywhere: str) -> None:
    odd = [0.1 + 0.2, 5e-324, 1.7976931348623157e308, -0.0, math.nan, math.inf, -math.inf, 2**53, 21]
    with open_store(anywhere) as store:
        intake = store.take_sensors([record(k / 1e6, room=value) for k, value in enumerate(odd)])
        assert (intake.new, intake.known, intake.amended, intake.refused) == (9, 0, 0, [])
    with open_store(anywhere) as store:
        found = store.sensor("room")
        assert found["value"].tolist()[:4] == odd[:4]
        assert math.isnan(found["value"][4])
        assert found["value"].tolist()[5:] == [math.inf, -math.inf, 2.0**53, 21.0]
        assert (found["at"] - START).dt.total_seconds().mul(1e6).round().tolist() == list(range(9))
        assert str(found["at"].dt.tz) == "UTC"


@pytest.mark.usefixtures("small_batches")
def test_order_and_repetition_do_not_matter(anywhere: str) -> None:
    """Over an hour's bound, shuffled, one half twice: what is stored is what was said."""
    records = made(range(0, 400, 3))
    rng = np.random.default_rng(1)
    shuffled = [records[k] for k in rng.permutation(len(records))]
    with open_store(anywhere) as store:
        assert store.take_sensors(shuffled[:90]).new == 180
        again = store.take_sensors([*shuffled[50:], *shuffled[:10]])
        assert (again.new, again.known) == (2 * 44, 2 * 50)
        for name in ("room", "pressure"):
            assert stored(store, name) == {3.0 * k: r["readings"][name] for k, r in enumerate(records)}
        listed = store.sensors()
        assert listed["name"].tolist() == ["pressure", "room"]
        assert listed["readings"].tolist() == [134, 134]
        assert listed["first"][0] == START
        assert listed["last"][0] == START + timedelta(seconds=399)
        assert listed["newest"][1] == records[-1]["readings"]["room"]


def test_files_twice_and_interleaved(store: Store, tmp_path: Path) -> None:
    records = made(range(5000))
    even = lines(tmp_path / "even.jsonl", records[::2])
    odd = lines(tmp_path / "odd.jsonl", records[1::2])
    assert store.take_sensor_file(even).new == 5000
    assert store.take_sensor_file(odd).new == 5000
    again = store.take_sensor_file(even)
    assert (again.new, again.known, again.refused) == (0, 5000, [])
    assert stored(store, "room") == {float(k): r["readings"]["room"] for k, r in enumerate(records)}


def test_a_generator_that_makes_us_wait_is_stored_at_once(
    store: Store, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("nightfold.ledger.batches.PATIENCE_S", -1.0)
    seen: list[int] = []

    def slow() -> Iterator[Record]:
        for k in range(3):
            seen.append(len(store.sensor("room")) if k else 0)
            yield record(k, room=20.0 + k)

    assert store.take_sensors(slow()).new == 3
    assert seen == [0, 1, 2]


def test_another_value_for_the_same_moment_is_refused_and_its_record_with_it(anywhere: str) -> None:
    with open_store(anywhere) as store:
        store.take_sensors([record(1, room={"value": 21.5, "unit": "degC"}), record(2, room=math.nan)])
        intake = store.take_sensors(
            [
                record(1, room=21.6, pressure=1e-11),
                record(2, room=math.nan),
                record(2, room=3.0),
                record(1, room={"value": 294.65, "unit": "K"}),
            ]
        )
        assert (intake.new, intake.known) == (0, 2)
        assert [(line.line, line.reason) for line in intake.refused] == [
            (
                1,
                "readings.room: found 21.6 degC, wanted 21.5 degC, which was taken before for this moment; "
                "what was read is never overwritten",
            ),
            (
                3,
                "readings.room: found 3.0 degC, wanted nan degC, which was taken before for this moment; "
                "what was read is never overwritten",
            ),
        ]
        assert store.sensors()["name"].tolist() == ["room"]  # a refused record brings no sensor


def test_of_contradictions_in_one_batch_the_first_counts(store: Store) -> None:
    """The second is refused whole, so the third, which contradicts only the second, is taken."""
    store.take_sensors([])
    intake = store.take_sensors(
        [
            record(0, room=1.0, coil=1.0),
            record(0, room=2.0, pressure=5.0),
            record(0, pressure=6.0),
            record(0, room=1.0, coil=1.0),
        ]
    )
    batched = [(line.line, line.reason.split(",")[0]) for line in intake.refused]
    assert batched == [(2, "readings.room: found 2.0")]
    assert (intake.new, intake.known) == (3, 2)
    assert stored(store, "pressure") == {0.0: 6.0}


def test_units_are_adopted_converted_or_refused(store: Store, tmp_path: Path) -> None:
    card = tmp_path / "heron.toml"
    card.write_text('machine = "heron"\n[sensors.coil]\nunit = "degC"\nrange = [20, 40]\n', encoding="utf-8")
    store.use_card(card)
    intake = store.take_sensors(
        [
            record(0, coil=30.0, room=21.0),
            record(1, coil={"value": 86.0, "unit": "degF"}, room={"value": 20.5, "unit": "degC"}),
            record(2, coil={"value": 303.15, "unit": "K"}, room={"value": 293.15, "unit": "K"}),
            record(3, coil={"value": 1.0, "unit": "A"}),
            record(4, coil={"value": 1.0, "unit": "blorps"}),
            record(5, laser={"value": 1.5, "unit": "mW"}),
            record(6, laser={"value": 0.0, "unit": "dBm"}),
        ]
    )
    assert stored(store, "coil") == {0.0: 30.0, 1.0: 30.0, 2.0: 30.0}
    assert stored(store, "room") == {0.0: 21.0, 1.0: 20.5, 2.0: 20.0}
    assert stored(store, "laser")[6.0] == pytest.approx(1.0, rel=1e-14)
    assert [line.reason for line in intake.refused] == [
        "readings.coil.unit: found 'A', wanted a unit that converts to degC",
        "readings.coil.unit: found 'blorps', wanted unit 'blorps' is not known; "
        "examples: A, ms, MHz, nK, G, atoms",
    ]
    assert store.sensors().set_index("name")["unit"].to_dict() == {
        "coil": "degC",
        "laser": "mW",
        "room": "degC",
    }
    assert store.sensor("coil").attrs["units"] == {"value": "degC"}


def test_a_card_cannot_change_what_bare_numbers_meant(store: Store, tmp_path: Path) -> None:
    store.take_sensors([record(0, room=21.0), record(0, coil={"value": 30.0, "unit": "degC"})])
    card = tmp_path / "heron.toml"
    card.write_text('machine = "heron"\n[sensors.coil]\nunit = "K"\n', encoding="utf-8")
    with pytest.raises(CardError, match=r"sensors\.coil\.unit: found 'K', wanted 'degC'"):
        store.use_card(card)
    card.write_text('machine = "heron"\n[sensors.room]\nunit = "degC"\n', encoding="utf-8")
    store.use_card(card)
    assert store.sensors().set_index("name")["unit"]["room"] == "degC"
    store.take(
        [{"machine": "heron", "started": moment(0), "sequence": "hold", "parameters": {"bias": 1.0},
          "observables": {"atoms": 1.0}}]
    )  # fmt: skip
    for name, other in (("bias", "a parameter"), ("atoms", "an observable")):
        card.write_text(f'machine = "heron"\n[sensors.{name}]\n', encoding="utf-8")
        with pytest.raises(CardError, match=f"the store has {other} of that name"):
            store.use_card(card)
        (line,) = store.take_sensors([record(9, **{name: 1.0})]).refused
        assert line.reason == (
            f"readings.{name}: found a sensor, wanted another name: '{name}' is {other} of heron"
        )


def test_a_sensor_has_no_name_that_the_card_derives(store: Store, tmp_path: Path) -> None:
    card = tmp_path / "heron.toml"
    card.write_text(
        'machine = "heron"\n[parameters.aom]\nunit = "MHz"\n[derived.detuning]\nexpression = "2 * aom"\n',
        encoding="utf-8",
    )
    store.use_card(card)
    (line,) = store.take_sensors([record(0, detuning=1.0)]).refused
    assert line.reason == (
        "readings.detuning: found a sensor, wanted another name: 'detuning' is a parameter of heron"
    )


@pytest.mark.parametrize(
    ("wrong", "reason"),
    [
        ("no object", "found 'no object', wanted one JSON object a line"),
        (
            {"readings": {"a": 1.0}, "at": "2026-10-05T20:00:00Z", "format": 1},
            "machine: found nothing, wanted the name of the machine, here or by --machine (machine=)",
        ),
        ({"machine": "heron", "readings": {"a": 1.0}}, "at: found nothing, wanted an ISO 8601 time"),
        (record(0, a=1.0) | {"at": "2026-10-05T20:00:00"}, "wanted an ISO 8601 time with an offset"),
        (record(0, a=1.0) | {"at": 12.5}, "at: found '12.5', wanted an ISO 8601 time"),
        (record(0) | {"readings": None}, "readings: found nothing, wanted an object such as"),
        (record(0) | {"readings": [1.0]}, "readings: found [1.0], wanted an object such as"),
        (record(0, a="21.3"), "readings.a: found '21.3', wanted a number, or an object with value and unit"),
        (record(0, a=True), "readings.a: found True, wanted a number"),
        (record(0, a={"unit": "K"}), "readings.a: found {'unit': 'K'}, wanted a number"),
        (record(0, a={"value": 1.0, "stderr": 0.1}), "readings.a: found {'value': 1.0, 'stderr': 0.1}"),
        (record(0, a={"value": 1.0, "unit": 3}), "readings.a.unit: found 3, wanted a unit in quotes"),
        (record(0, a=2**53 + 1), "readings.a: found 9007199254740993, wanted a number that a float holds"),
        (record(0, a=10**400), "readings.a: found 1000000000"),
        (record(0, a=1.0) | {"format": 2}, "format: found 2, wanted format 1"),
        (record(0, a=1.0) | {"reading": {}}, "reading: found {}, wanted no such field; is 'readings' meant?"),
        (record(0, **{" ": 1.0}), "readings: found ' ', wanted a name of 1 to 200 printable characters"),
        (
            record(0, **{"a": 1.0, "a ": 2.0}),
            "readings.a: found the same name twice, wanted each sensor once",
        ),
    ],
)
def test_what_is_wrong_is_refused_with_its_place_and_the_rest_is_taken(
    store: Store, wrong: Any, reason: str
) -> None:
    intake = store.take_sensors([record(1, good=1.0), wrong, record(2, good=2.0)])
    assert intake.new == 2
    (line,) = intake.refused
    assert line.line == 2
    assert reason in line.reason
    assert store.sensors()["name"].tolist() == ["good"]


def test_a_reading_that_is_null_says_nothing(store: Store) -> None:
    intake = store.take_sensors(
        [record(0, a=None, b={"value": None, "unit": "K"}, c=np.float32(0.5), d=np.int64(3))]
    )
    assert (intake.new, intake.known, intake.refused) == (2, 0, [])
    assert stored(store, "c") == {0.0: 0.5}


def test_refusals_of_a_file_are_logged_and_mended(store: Store, store_path: Path, tmp_path: Path) -> None:
    path = tmp_path / "room.jsonl"
    good = json.dumps(record(0, room=21.0))
    path.write_text(f'{good}\nnot JSON\n{{"machine": "heron", "at"\n', encoding="utf-8")
    intake = store.take_sensor_file(path)
    assert [line.line for line in intake.refused] == [2, 3]
    with sqlite3.connect(store_path) as raw:
        logged = raw.execute("SELECT line, byte, reason FROM refusal ORDER BY line").fetchall()
    assert [(line, byte) for line, byte, _ in logged] == [(2, len(good) + 1), (3, len(good) + 10)]
    path.write_text(f"{good}\n{json.dumps(record(1, room=22.0))}\n", encoding="utf-8")
    intake = store.take_sensor_file(path)
    assert (intake.new, intake.known, intake.refused) == (1, 1, [])


TABLE = """\
# from the logger beside the table
at;machine;room_temperature [degF];pressure [mbar];humidity
2026-10-05T21:58:00+02:00;heron;70.7;3.1e-11;41
2026-10-05T21:58:01+02:00;heron;;nan;
2026-10-05T21:58:02+02:00;heron;70.7;3.2e-11;forty
2026-10-05T21:58:03+02:00;;70.7;3.3e-11;42
2026-10-05T21:58:04+02:00;osprey;68;3.3e-11;42
"""


def test_a_table(store: Store, tmp_path: Path) -> None:
    path = tmp_path / "room.csv"
    path.write_text(TABLE, encoding="utf-8")
    intake = store.take_sensor_file(path)
    assert intake.new == 3 + 1 + 3
    assert [(line.line, line.reason.split(",")[0]) for line in intake.refused] == [
        (5, "readings.humidity: found 'forty'"),
        (6, "machine: found nothing"),
    ]
    assert stored(store, "room_temperature", machine="heron") == {0.0: 70.7}
    assert store.sensors("heron").set_index("name")["unit"].to_dict() == {
        "room_temperature": "degF",
        "pressure": "mbar",
        "humidity": None,
    }
    again = store.take_sensor_file(path, machine="heron")
    assert (again.new, again.known) == (3, 7)
    with pytest.raises(ChoiceNeeded, match="sensor 'humidity': heron, osprey have one of this name"):
        store.sensor("humidity")


@pytest.mark.parametrize(
    ("text", "reason"),
    [
        ("time,a\n2026-10-05T21:58:00Z,1\n", "no column 'at' with the time of the readings"),
        ("at\n2026-10-05T21:58:00Z\n", "no column of a sensor beside 'at'"),
        ("at,a,a\n2026-10-05T21:58:00Z,1,2\n", "two columns of this name"),
        ("at,a [blorps]\n2026-10-05T21:58:00Z,1\n", "a: found unit 'blorps'"),
    ],
)
def test_tables_whose_head_cannot_be_understood(store: Store, tmp_path: Path, text: str, reason: str) -> None:
    path = tmp_path / "room.csv"
    path.write_text(text, encoding="utf-8")
    with pytest.raises((ChoiceNeeded, RecordError), match=reason):
        store.take_sensor_file(path, machine="heron")


def test_names_and_delimiters_of_tables(store: Store, tmp_path: Path) -> None:
    path = tmp_path / "room.tsv"
    path.write_text("time\troom\n2026-10-05T21:58:00Z\t1.5\n2026-10-05T21:58:01Z\t1,5\n", encoding="utf-8")
    intake = store.take_sensor_file(path, machine="heron", at="time")
    assert intake.new == 1
    assert "a decimal comma" in intake.refused[0].reason
    with pytest.raises(NotFound, match="there is no such file"):
        store.take_sensor_file(tmp_path / "none.csv")


def test_naive_times_only_if_the_card_says_so_and_not_in_the_hour_that_comes_twice(
    store: Store, tmp_path: Path
) -> None:
    """Clocks of Vienna go back at 03:00 on 25 October 2026."""
    path = tmp_path / "room.csv"
    path.write_text(
        "at,room\n2026-10-25T01:59:59,1\n2026-10-25T02:30:00,2\n2026-10-25T02:30:00+01:00,3\n2026-10-25T03:00:00,4\n",
        encoding="utf-8",
    )
    intake = store.take_sensor_file(path, machine="heron")
    assert (intake.new, len(intake.refused)) == (1, 3)
    card = tmp_path / "heron.toml"
    card.write_text('machine = "heron"\nzone = "Europe/Vienna"\nnaive_times = true\n', encoding="utf-8")
    store.use_card(card)
    intake = store.take_sensor_file(path)
    assert (intake.new, intake.known) == (2, 1)
    (line,) = intake.refused
    assert (line.line, line.reason) == (
        3,
        "at: found '2026-10-25T02:30:00', wanted an offset: the clocks of Europe/Vienna show this hour twice",
    )
    found = store.sensor("room")
    assert found["at"].dt.strftime("%H:%M:%S").tolist() == ["23:59:59", "01:30:00", "02:00:00"]
    night = store.sensor("room", "2026-10-25T02:00+01:00", "2026-10-25T03:00")
    assert night["value"].tolist() == [3.0]


def test_one_record_alone_is_not_taken_apart(store: Store) -> None:
    with pytest.raises(TypeError, match="take_sensors: found one dict"):
        store.take_sensors(record(0, room=1.0))  # type: ignore[arg-type]


def test_a_failure_in_the_middle_leaves_the_batches_before_it(store: Store) -> None:
    def broken() -> Iterator[Record]:
        yield from made(range(10))
        raise OSError("the logger is gone")

    with pytest.raises(OSError, match="the logger is gone"):
        store.take_sensors(broken())
    before = len(store.sensor("room"))
    assert 0 < before < 10
    intake = store.take_sensors(made(range(10)))
    assert (intake.new, intake.known) == (2 * (10 - before), 2 * before)
