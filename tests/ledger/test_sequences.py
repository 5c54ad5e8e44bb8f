"""Sequences: versions by structure, the steps of a shot in time, what differs between shots."""

from __future__ import annotations

import math
from collections.abc import Iterator
from datetime import UTC, datetime, timedelta
from typing import Any

import pytest

from nightfold.errors import ChoiceNeeded, NotFound
from nightfold.ledger.timeline import ramp_of
from nightfold.opening import open_store
from nightfold.store import Store

BEGIN = datetime(2026, 10, 5, 19, tzinfo=UTC)
Step = dict[str, Any]


def of(value: float, unit: str) -> dict[str, Any]:
    return {"value": value, "unit": unit}


def step(name: str, duration: Any = None, **settings: Any) -> Step:
    return {"name": name, "duration": duration, "settings": settings}


def shot(n: int, *steps: Step, name: str = "look", machine: str = "heron", **fields: Any) -> dict[str, Any]:
    started = (BEGIN + timedelta(minutes=n)).isoformat()
    sequence = {"name": name, "steps": list(steps)}
    return {
        "machine": machine,
        "uid": f"{machine}-{name}-{n:04d}",
        "started": started,
        "sequence": sequence,
        **fields,
    }


def steps_of(end: float = 0.2, power: float = 1.2, ramp: Any = (3, 2, 1)) -> list[Step]:
    return [
        step("load", of(10, "s"), power=of(power, "mW"), gradient=of(9.5, "G/cm")),
        step("ramp", of(900, "ms"), power=list(ramp)),
        step("ramp", of(1.6, "s"), end=of(end, "W")),
        step("pulse", of(5, "us"), phase=of(90, "deg")),
    ]


@pytest.fixture
def anywhere_store(anywhere: str) -> Iterator[Store]:
    with open_store(anywhere) as opened:
        yield opened


def test_versions_are_told_apart_by_structure_alone(anywhere_store: Store) -> None:
    store = anywhere_store
    store.take([shot(n, *steps_of(end=0.1 * n)) for n in range(3)])
    store.take([shot(n, *steps_of()[::-1]) for n in (3, 4)])
    store.take([shot(5, *steps_of()[:-1]), shot(6, *steps_of(power=7))])
    turned = steps_of()
    turned[0]["settings"] = dict(reversed(turned[0]["settings"].items()))
    store.take([shot(7, *turned)])
    view = store.sequence("look")
    assert [(item.number, item.shots) for item in view.versions] == [(1, 5), (2, 2), (3, 1)]
    assert (view.versions[0].first, view.versions[0].last) == (BEGIN, BEGIN + timedelta(minutes=7))
    assert [item.name for item in view.versions[1].steps or ()] == ["pulse", "ramp", "ramp#2", "load"]
    listed = store.sequences()
    assert listed.drop(columns=["first", "last"]).values.tolist() == [["heron", "look", 3, 8]]
    assert [moment.isoformat() for moment in listed.iloc[0][["first", "last"]]] == [
        "2026-10-05T19:00:00+00:00",
        "2026-10-05T19:07:00+00:00",
    ]


def test_numbers_of_versions_go_by_first_use_not_by_arrival(store: Store) -> None:
    store.take([shot(5, *steps_of())])
    store.take([shot(1, *steps_of()[:2])])
    assert [len(item.steps or ()) for item in store.sequence("look").versions] == [2, 4]


def test_the_steps_of_the_newest_shot_in_time(anywhere_store: Store) -> None:
    store = anywhere_store
    store.take([shot(n, *steps_of(end=(20 + n) / 100)) for n in range(4)])
    timeline = store.sequence("look").timeline()
    assert (timeline.uid, timeline.version) == ("heron-look-0003", 1)
    assert [(item.name, item.start_s, item.duration_s) for item in timeline.steps] == [
        ("load", 0.0, 10.0),
        ("ramp", 10.0, 0.9),
        ("ramp#2", 10.9, 1.6),
        ("pulse", 12.5, 5e-6),
    ]
    assert timeline.duration_s == 12.500005
    load, ramp, again, _ = timeline.steps
    assert [(item.name, item.value, item.unit) for item in load.settings] == [
        ("power", 1.2, "mW"),
        ("gradient", 9.5, "G/cm"),
    ]
    assert load.duration is not None
    assert (load.duration.value, load.duration.unit) == (10.0, "s")
    assert ramp.settings[0].ramp == (3.0, 2.0, 1.0)
    assert again.settings[0].value == 0.23
    older = store.sequence("look").timeline(shot="heron-look-0001")
    assert older.steps[2].settings[0].value == 0.21


def test_what_differs_between_shots_is_counted(anywhere_store: Store) -> None:
    """Swept at 60 shots, edited twice by a person, a ramp changed once, a reading that never rests."""
    store = anywhere_store
    records = [
        shot(
            n,
            *steps_of(end=0.1 * (n % 6) if 20 <= n < 80 else 0.2, power=1.2 if n < 90 else 1.3 if n < 95 else 1.1,
                      ramp=(3, 2, 1) if n < 85 else (4, 2, 1)),
            swept=["ramp#2.end"] if 20 <= n < 80 else [], reference=not 20 <= n < 80,
            parameters={"room": 20 + math.sin(n * n), "axis": "x" if n < 50 else "y", "on": n > 3, "still": 5},
        )
        for n in range(120)
    ]  # fmt: skip
    store.take(records)
    timeline = store.sequence("look").timeline()
    spreads = {
        f"{item.name}.{part.name}": part.spread
        for item in timeline.steps
        for part in item.settings
        if part.spread
    } | {part.name: part.spread for part in timeline.others if part.spread}
    assert set(spreads) == {"ramp#2.end", "load.power", "ramp.power", "room", "axis", "on"}
    end, power, ramp = spreads["ramp#2.end"], spreads["load.power"], spreads["ramp.power"]
    assert (end.values, end.low, end.high, end.swept) == (6, 0.0, 0.5, True)
    assert end.changed == BEGIN + timedelta(minutes=79)
    assert (power.values, power.low, power.high, power.swept, power.edits) == (3, 1.1, 1.3, False, 2)
    assert power.changed == BEGIN + timedelta(minutes=95)
    assert (ramp.values, ramp.low, ramp.edits) == (2, None, 1)
    assert ramp.words == ("[3,2,1]", "[4,2,1]")
    room, axis, truth = spreads["room"], spreads["axis"], spreads["on"]
    assert (room.values, room.edits, room.swept, room.changed) == (120, 0, False, None)
    assert (axis.values, axis.words, axis.edits) == (2, ("x", "y"), 1)
    assert (truth.values, truth.low, truth.high) == (2, 0.0, 1.0)
    edits = store.edits()
    assert power.edits == (edits.parameter == "load.power").sum()


def test_a_spread_is_of_one_version(store: Store) -> None:
    store.take([shot(n, *steps_of(power=1 + n // 5)) for n in range(10)])
    store.take([shot(n, *steps_of(power=9)[:2]) for n in range(10, 15)])
    view = store.sequence("look")
    assert view.timeline().steps[0].settings[0].spread is None
    first = view.timeline(1).steps[0].settings[0]
    assert first.value == 2.0
    assert first.spread is not None
    assert (first.spread.values, first.spread.high, first.spread.edits) == (2, 2.0, 1)


def test_the_clock_stops_at_a_step_without_a_duration(store: Store) -> None:
    store.take([shot(0, step("load", of(1, "s")), step("hold"), step("look", of(2, "ms")))])
    timeline = store.sequence("look").timeline()
    assert [item.duration_s for item in timeline.steps][::2] == [1.0, 0.002]
    assert math.isnan(timeline.steps[1].duration_s)
    assert timeline.steps[1].duration is None
    assert [item.start_s for item in timeline.steps][:2] == [0.0, 1.0]
    assert math.isnan(timeline.steps[2].start_s)
    assert math.isnan(timeline.duration_s)


def test_durations_are_stored_in_the_unit_first_stated(store: Store) -> None:
    store.take([shot(0, step("load", of(250, "ms"))), shot(1, step("load", of(0.5, "s")))])
    (only,) = store.sequence("look").timeline().steps
    assert only.duration is not None
    assert (only.duration.value, only.duration.unit, only.duration_s) == (500.0, "ms", 0.5)


def test_a_sequence_without_steps(store: Store) -> None:
    plain = {"machine": "heron", "uid": "p", "started": BEGIN.isoformat(), "sequence": "plain"}
    store.take([plain | {"parameters": {"b": of(2, "A"), "a": 1}}])
    view = store.sequence("plain")
    assert [(item.number, item.steps, item.shots) for item in view.versions] == [(1, None, 1)]
    timeline = view.timeline()
    assert timeline.steps == ()
    assert [(item.name, item.value, item.unit) for item in timeline.others] == [
        ("a", 1.0, ""),
        ("b", 2.0, "A"),
    ]


def test_steps_that_were_stated_later(store: Store) -> None:
    plain = {"machine": "heron", "uid": "p", "started": BEGIN.isoformat(), "sequence": "look"}
    store.take([plain | {"parameters": {"a": 1}}, shot(1, *steps_of(), parameters={"a": 1})])
    view = store.sequence("look")
    assert [item.steps is None for item in view.versions] == [True, False]
    comparison = view.compare(1, 2)
    assert [item.kind for item in comparison.steps] == ["added"] * 4
    assert comparison.others == ()


def test_versions_and_shots_compared(anywhere_store: Store) -> None:
    store = anywhere_store
    store.take([shot(n, *steps_of(end=(n + 1) / 10)) for n in range(3)])
    store.take([shot(3, *steps_of(end=0.3), step("look", of(40, "us"), camera=True))])
    view = store.sequence("look")
    comparison = view.compare(1, 2)
    assert [(item.kind, item.new, item.new_place) for item in comparison.steps] == [("added", "look", 5)]
    assert (comparison.old.uid, comparison.new.uid) == ("heron-look-0002", "heron-look-0003")
    assert (comparison.old.duration_s, comparison.new.duration_s) == (12.500005, 12.500045)
    comparison = view.compare("heron-look-0000", "heron-look-0001")
    ((name, old, new),) = [(part.name, part.old, part.new) for part in comparison.steps[0].settings]
    assert (name, old and old.value, new and new.value, new and new.unit) == ("end", 0.1, 0.2, "W")
    assert not view.compare("heron-look-0003").steps


def test_one_parameter_two_sequences(store: Store) -> None:
    """Parameters belong to the machine; the shots of another sequence say nothing about this one."""
    store.take([shot(n, *steps_of(power=1 + n), name="other") for n in range(5)])
    store.take([shot(n, *steps_of(power=3)) for n in range(5)])
    assert store.sequence("look").timeline().steps[0].settings[0].spread is None


def test_what_is_not_there(store: Store) -> None:
    assert store.sequences().empty
    store.take(
        [shot(0, *steps_of()), shot(0, *steps_of(), name="hold"), shot(1, *steps_of(), machine="egret")]
    )
    with pytest.raises(NotFound, match="sequence 'loook': not in this store; it has look"):
        store.sequence("loook", machine=None)
    with pytest.raises(NotFound, match="sequence 'hold': not of egret; it has look"):
        store.sequence("hold", machine="egret")
    with pytest.raises(
        ChoiceNeeded, match=r"sequence 'look': of several machines \(egret, heron\); name the machine"
    ):
        store.sequence("look")
    view = store.sequence("look", machine="heron")
    with pytest.raises(NotFound, match="version 2 of sequence 'look': it has version 1"):
        view.timeline(2)
    with pytest.raises(
        NotFound, match="shot 'heron-hold-0000': it ran another sequence, wanted one of 'look'"
    ):
        view.timeline(shot="heron-hold-0000")
    with pytest.raises(NotFound, match="shot 'heron-look-0000': it ran version 1, wanted 3"):
        view.timeline(3, shot="heron-look-0000")
    assert store.sequences("egret").sequence.tolist() == ["look"]


@pytest.mark.parametrize(
    ("value", "numbers"),
    [("[1,2.5]", (1.0, 2.5)), ("[]", ()), ("[1,true]", None), ("[x]", None), ("sigma", None), (3.0, None)],
)  # fmt: skip
def test_a_list_of_numbers_is_known_by_its_form(value: Any, numbers: Any) -> None:
    assert ramp_of(value) == numbers


@pytest.mark.parametrize(
    ("duration", "found"),
    [
        (of(1, "A"), "'A'"), (-1, "-1.0"), (of(-1, "ms"), "-1.0"), (math.nan, "nan"), (math.inf, "inf"),
        (of(math.inf, "s"), "inf"), ("long", "'long'"), (True, "True"), ([1, 2], "'[1,2]'"), (of(1, "1"), "'1'"),
    ],
)  # fmt: skip
def test_a_duration_is_a_finite_time(anywhere: str, duration: Any, found: str) -> None:
    good = shot(1, step("load", 1), step("look", of(5, "ms")))
    with open_store(anywhere) as store:
        outcome = store.take([shot(0, step("load", 1), step("look", duration)), good])
        (refused,) = outcome.refused
        assert refused.reason.startswith("sequence.steps.1.duration")
        assert f"found {found}, wanted a" in refused.reason
        assert outcome.new == 1
        assert store.sequence("look").timeline().steps[1].duration_s == pytest.approx(0.005)


def test_a_duration_among_the_settings_of_a_step(store: Store) -> None:
    (refused,) = store.take([shot(0, {"name": "load", "settings": {"duration": of(1, "A")}})]).refused
    assert refused.reason.startswith(
        "sequence.steps.0.settings.duration.unit: found 'A', wanted a unit of time"
    )


@pytest.mark.parametrize("duration", [None, of(3, "ms"), 0, 0.0, -0.0, 7, {"value": 2, "unit": "min"}])
def test_durations_that_are_taken(store: Store, duration: Any) -> None:
    assert store.take([shot(0, step("load", duration))]).new == 1
