"""Records of heron: valid by format 1, in the card's units and ranges, and as untidy as a laboratory's."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator
from itertools import pairwise
from typing import Any

import pytest
from jsonschema import Draft202012Validator

from nightfold.card import MachineCard, read_card
from nightfold.records import ShotRecord, parse_record, record_schema
from nightfold.simulator import shot_records
from nightfold.simulator.machine import CARD
from nightfold.units import convert

Record = dict[str, Any]


@pytest.fixture(scope="module")
def records() -> list[Record]:
    return list(shot_records(nights=10))


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


def test_every_record_is_valid(records: list[Record]) -> None:
    for record in records:
        assert isinstance(parse_record(record), ShotRecord)
    schema = Draft202012Validator(record_schema())
    for record in records[::40]:
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
            entry = card.observables[name]
            if stated is not None and "failed" not in record:
                assert entry.plausible(in_card_unit(stated, entry.unit)), name


def test_the_card_describes_the_machine(records: list[Record], card: MachineCard) -> None:
    assert card.machine == "heron"
    assert card.species == ("39K",)
    assert card.main_observable == "atom_number"
    used = {name for record in records for name, _ in settings_of(record)}
    assert used == set(card.parameters)
    assert all(entry.description for entry in (*card.parameters.values(), *card.observables.values()))


def test_many_parameters_of_every_kind(records: list[Record]) -> None:
    for record in records:
        assert 110 <= len(record["parameters"]) + 8 * isinstance(record["sequence"], dict) <= 125
        assert len(record["observables"]) == 8
    kinds = Counter(type(value) for value in records[0]["parameters"].values())
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
    assert len(records) / 22 < len(references) < len(records) / 14
    assert all("scan" not in record and "swept" not in record for record in references)
    nominal = {str(record["parameters"]) for record in references if record["started"] < "2026-10-01"}
    assert len(nominal) == 1
    failed = [record for record in records if "failed" in record]
    assert 0.003 < len(failed) / len(records) < 0.04
    assert all(record["observables"]["temperature"] is None for record in failed)


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
