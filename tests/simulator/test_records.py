"""Records of heron: valid by format 1, in the card's units and ranges, and as untidy as a laboratory's."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator
from itertools import pairwise
from typing import Any

import pytest
from jsonschema import Draft202012Validator

from nightfold.card import MachineCard, read_card
from nightfold.records import Amendment, ShotRecord, parse_record, record_schema
from nightfold.simulator import shot_records
from nightfold.simulator.machine import CARD
from nightfold.simulator.steps import INSIDE_STEPS
from nightfold.units import convert

Record = dict[str, Any]


@pytest.fixture(scope="module")
def lines() -> list[Record]:
    return list(shot_records(nights=10))


@pytest.fixture(scope="module")
def records(lines: list[Record]) -> list[Record]:
    """Return the shots alone, without what comes later."""
    return [record for record in lines if "started" in record]


def is_of_afternoon(record: Record) -> bool:
    return "-a0" in record.get("uid", "")


@pytest.fixture(scope="module")
def card() -> MachineCard:
    return read_card(CARD)


def settings_of(record: Record) -> Iterator[tuple[str, Any]]:
    """Yield every setting of a record, those of its steps included."""
    yield from record["parameters"].items()
    if isinstance(record["sequence"], dict):
        seen: Counter[str] = Counter()
        for step in record["sequence"]["steps"]:
            seen[step["name"]] += 1
            number = seen[step["name"]]
            place = step["name"] if number == 1 else f"{step['name']}#{number}"
            yield f"{place}.duration", step["duration"]
            for name, value in step["settings"].items():
                yield f"{place}.{name}", value


def name_of(record: Record) -> str:
    sequence = record["sequence"]
    return str(sequence["name"] if isinstance(sequence, dict) else sequence)


def in_card_unit(stated: Any, unit: str | None) -> Any:
    if isinstance(stated, dict) and "unit" in stated:
        return convert(stated["value"], stated["unit"], unit or "")
    return stated["value"] if isinstance(stated, dict) else stated


def test_every_record_is_valid(lines: list[Record]) -> None:
    for record in lines:
        assert isinstance(parse_record(record), ShotRecord if "started" in record else Amendment)
    schema = Draft202012Validator(record_schema())
    for record in lines[::40]:
        schema.validate(record)


def test_settings_and_readings_stand_in_the_card_within_range(
    records: list[Record], card: MachineCard
) -> None:
    for record in records[::3]:
        for name, stated in settings_of(record):
            entry = card.parameters[name]
            value = in_card_unit(stated, entry.unit)
            if entry.kind == "truth":
                assert isinstance(value, bool), name
            elif entry.kind == "text":
                assert isinstance(value, (str, list)), name
            else:
                assert entry.low is not None
                assert entry.plausible(value), name
        for name, stated in record["observables"].items():
            known = card.observable(name)
            assert known is not None
            if stated is not None and "failed" not in record:
                assert known.plausible(in_card_unit(stated, known.unit)), name


def test_the_card_describes_the_machine(records: list[Record], card: MachineCard) -> None:
    assert card.machine == "heron"
    assert card.species == ("39K",)
    assert card.main_observable == "atom_number"
    used = {name for record in records for name, _ in settings_of(record)}
    assert used == set(card.parameters)
    assert all(entry.description for entry in (*card.parameters.values(), *card.observables.values()))


def test_many_parameters_of_every_kind(records: list[Record]) -> None:
    for record in records:
        assert 110 <= len(list(settings_of(record))) <= 135
        assert len(record["observables"]) == 8 or is_of_afternoon(record)
    named = next(record for record in records if isinstance(record["sequence"], str))
    kinds = Counter(type(value) for value in named["parameters"].values())
    assert kinds[dict] > 30
    assert kinds[float] > 20
    assert kinds[bool] > 5
    assert kinds[str] > 4


def test_hold_time_is_stated_in_three_ways(records: list[Record]) -> None:
    ways = {name_of(record): record["parameters"]["hold_time"] for record in records}
    assert ways["hold-in-trap"]["unit"] == "ms"
    assert ways["long-hold"]["unit"] == "s"
    assert not isinstance(ways["kick-and-hold"], dict)


def test_references_failures_and_gaps(records: list[Record]) -> None:
    references = [record for record in records if record.get("reference")]
    evenings = [record for record in records if not is_of_afternoon(record)]
    usual = [record for record in references if not is_of_afternoon(record)]
    assert len(evenings) / 22 < len(usual) < len(evenings) / 14
    assert all("scan" not in record and "swept" not in record for record in references)
    nominal = {str(record["parameters"]) for record in references if record["started"] < "2026-10-01"}
    assert len(nominal) == 1
    failed = [record for record in records if "failed" in record]
    assert 0.003 < len(failed) / len(records) < 0.04
    assert all(record["observables"].get("temperature") is None for record in failed)


def test_two_labels_interleave_in_one_sequence(records: list[Record]) -> None:
    labels = [record["scan"] for record in records if record.get("scan", "").startswith("loss-")]
    pair = [label for label in labels if label in ("loss-low", "loss-high")]
    assert {label: pair.count(label) for label in pair} == {"loss-low": 100, "loss-high": 100}
    assert sum(a != b for a, b in pairwise(pair)) > 190


@pytest.mark.parametrize("declare", [None, True, False])
def test_sweeps_are_declared_as_asked(declare: bool | None) -> None:
    records = list(shot_records(nights=5, declare_swept=declare))
    moving = [record for record in records if "scan" in record]
    share = sum("swept" in record for record in records) / len(records)
    if declare is None:
        assert 0.5 < share < 0.9
        assert any("swept" not in record for record in moving)
        assert any("swept" in record and "scan" not in record for record in records)
    else:
        assert all(("swept" in record) == declare for record in moving)


def test_declaring_sweeps_changes_nothing_else() -> None:
    for one, other in zip(
        shot_records(nights=2, declare_swept=True), shot_records(nights=2, declare_swept=False), strict=True
    ):
        assert {**one, "swept": None} == {**other, "swept": None}


def test_a_scan_is_broken_off_and_taken_up_again(records: list[Record]) -> None:
    fine = [record for record in records[1000:] if record.get("scan") == "loss-fine"]
    days = Counter(record["started"][:10] for record in fine)
    assert len(days) >= 2
    assert len(fine) == 75 == fine[0]["planned_shots"]
    assert sum("note" in record for record in fine) == 1


def test_settings_stand_in_steps_or_among_the_parameters_but_not_twice(
    records: list[Record], card: MachineCard
) -> None:
    record = next(record for record in records if name_of(record) == "hold-in-trap")
    assert INSIDE_STEPS.isdisjoint(record["parameters"])
    named = next(record for record in records if name_of(record) == "dense-hold")
    assert named["parameters"].keys() >= INSIDE_STEPS
    stated = dict(settings_of(record))
    for step, name in (
        ("molasses.detuning", "molasses_detuning"),
        ("image.exposure", "camera_exposure"),
        ("evaporate#3.end_power", "evaporation_3_end_power"),
        ("passage.level", "rf_level"),
    ):
        unit = card.parameters[name].unit
        assert card.parameters[step].unit == unit
        assert in_card_unit(stated[step], unit) == in_card_unit(named["parameters"][name], unit)


def test_a_step_is_put_in_for_good(records: list[Record]) -> None:
    with_it = [
        any(step["name"] == "settle" for step in record["sequence"]["steps"])
        for record in records
        if name_of(record) == "hold-in-trap"
    ]
    first = with_it.index(True)
    assert first > 300
    assert not any(with_it[:first])
    assert all(with_it[first:])


def test_late_readings_come_minutes_after_their_shot(lines: list[Record]) -> None:
    place = {
        record["uid"]: number
        for number, record in enumerate(lines)
        if "sequence" in record and "uid" in record
    }
    late = [(number, record) for number, record in enumerate(lines) if "started" not in record]
    assert len(late) > 100
    for number, record in late:
        shot = lines[place[record["uid"]]]
        assert not record["observables"].keys() & shot["observables"].keys()
        assert number - place[record["uid"]] > 6
        assert "temperature" in record["observables"]


def test_two_clouds_share_one_picture(records: list[Record]) -> None:
    both = [record for record in records if name_of(record) == "rf-transfer" and "failed" not in record]
    assert len(both) > 55
    for record in both:
        seen = record["observables"]
        total = seen["atom_number[up]"]["value"] + seen["atom_number[down]"]["value"]
        assert 120_000 < total < 180_000


def test_one_machine_under_two_names(records: list[Record]) -> None:
    other = [record for record in records if record["machine"] != "heron"]
    assert len(other) == 24
    assert {record["machine"] for record in other} == {"Heron"}
