"""Two runs of a sequence compared: which steps are the same, and which of their settings differ."""

from __future__ import annotations

from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from nightfold.ledger.comparing import Run, Stated, compare_runs
from nightfold.ledger.structure import StepNames, parse_structure

Content = dict[str, Any]


def run_of(*steps: tuple[str, Content], **others: Any) -> Run:
    """Return a run; a plain number is in MHz, a pair has its own unit, durations are in ms."""
    seen: dict[str, int] = {}
    names, settings = [], {name: Stated(value, "") for name, value in others.items()}
    for base, content in steps:
        seen[base] = seen.get(base, 0) + 1
        name = base if seen[base] == 1 else f"{base}#{seen[base]}"
        keys = tuple(key for key in content if key != "duration")
        names.append(StepNames(name, keys, "duration" in content))
        for key, value in content.items():
            unit = "ms" if key == "duration" else "MHz"
            settings[f"{name}.{key}"] = Stated(*value) if isinstance(value, tuple) else Stated(value, unit)
    return Run(tuple(names), settings)


def kinds(old: Run, new: Run) -> list[tuple[str, str | None, str | None]]:
    return [(change.kind, change.old, change.new) for change in compare_runs(old, new)[0]]


LOAD = ("load", {"duration": 1e4, "detuning": -12.0})
COOL = ("cool", {"duration": 8.0, "detuning": -60.0, "power": 0.9})
TRAP = ("trap", {"duration": 120.0, "depth": 18.5})
LOOK = ("look", {"duration": 0.04, "camera": 1.0})


def test_the_same_is_no_difference() -> None:
    run = run_of(LOAD, COOL, TRAP, LOOK, room=21.0)
    assert compare_runs(run, run) == ([], [], [])


def test_values_changed_added_and_removed() -> None:
    changes, others, _ = compare_runs(
        run_of(LOAD, ("cool", {"duration": 8.0, "detuning": -60.0, "power": 0.9}), a=1.0, b="x"),
        run_of(LOAD, ("cool", {"duration": 9.0, "detuning": -60.0, "field": 1.5}), b="y", c=True),
    )
    (change,) = changes
    assert (change.kind, change.old_place, change.new_place) == ("kept", 2, 2)
    assert [(item.name, item.old, item.new) for item in change.settings] == [
        ("duration", Stated(8.0, "ms"), Stated(9.0, "ms")),
        ("field", None, Stated(1.5, "MHz")),
        ("power", Stated(0.9, "MHz"), None),
    ]
    assert [(item.name, item.old, item.new) for item in others] == [
        ("b", Stated("x", ""), Stated("y", "")),
        ("c", None, Stated(True, "")),
        ("a", Stated(1.0, ""), None),
    ]


def test_steps_added_and_removed_stand_in_the_order_of_the_sequence() -> None:
    new = run_of(("warm", {"heater": 1.0}), LOAD, COOL, LOOK)
    assert kinds(run_of(LOAD, COOL, TRAP, LOOK), new) == [("added", None, "warm"), ("removed", "trap", None)]
    (added, removed), _, _ = compare_runs(run_of(LOAD, COOL, TRAP, LOOK), new)
    assert (added.new_place, added.settings[0].new) == (1, Stated(1.0, "MHz"))
    assert (removed.old_place, [item.name for item in removed.settings]) == (3, ["duration", "depth"])


def test_a_step_that_moved() -> None:
    (change,), _, _ = compare_runs(run_of(LOAD, COOL, TRAP, LOOK), run_of(TRAP, LOAD, COOL, LOOK))
    assert (change.kind, change.new, change.old_place, change.new_place) == ("moved", "trap", 3, 1)
    assert change.settings == ()


def test_a_step_that_moved_and_changed() -> None:
    other = ("trap", {"duration": 5.0, "field": 3.0})
    (change,), _, _ = compare_runs(run_of(LOAD, COOL, TRAP, LOOK), run_of(other, LOAD, COOL, LOOK))
    assert change.kind == "moved"
    assert [item.name for item in change.settings] == ["duration", "field", "depth"]


def test_a_step_that_looks_renamed() -> None:
    old = run_of(LOAD, COOL, LOOK)
    assert kinds(old, run_of(LOAD, ("molasses", {**COOL[1], "power": 1.1}), LOOK)) == [
        ("renamed", "cool", "molasses")
    ]
    assert kinds(old, run_of(LOAD, ("push", {"duration": 8.5, "angle": 2.0}), LOOK)) == [
        ("removed", "cool", None),
        ("added", None, "push"),
    ]
    assert kinds(old, run_of(("molasses", COOL[1]), LOAD, LOOK)) == [
        ("added", None, "molasses"),
        ("removed", "cool", None),
    ], "another name at another place is another step"


def test_of_repeated_steps_those_alike_are_paired() -> None:
    ramps = [("ramp", {"duration": float(n), "end": 10.0 - n}) for n in range(1, 5)]
    changes, _, renumbered = compare_runs(run_of(*ramps), run_of(*ramps[1:]))
    assert [(change.kind, change.old, change.new) for change in changes] == [("removed", "ramp", None)]
    assert renumbered == [("ramp#2", "ramp"), ("ramp#3", "ramp#2"), ("ramp#4", "ramp#3")]


def test_a_repeated_wait_elsewhere_is_no_move_unless_it_is_alike() -> None:
    waits = [("wait", {"duration": 1.0}), ("wait", {"duration": 2.0})]
    old = run_of(waits[0], LOAD, waits[1], COOL, LOOK)
    longer = ("wait", {"duration": 7.0})
    assert kinds(old, run_of(waits[0], LOAD, COOL, LOOK, longer)) == [
        ("removed", "wait#2", None),
        ("added", None, "wait#2"),
    ]
    assert kinds(old, run_of(waits[0], LOAD, COOL, LOOK, waits[1])) == [("moved", "wait#2", "wait#2")]


@pytest.mark.parametrize(
    ("one", "other", "same"),
    [
        (Stated(0.5, "s"), Stated(500.0, "ms"), True),
        (Stated(0.5, "s"), Stated(501.0, "ms"), False),
        (Stated(0.5, "s"), Stated(0.5, ""), False),
        (Stated(float("nan"), "s"), Stated(float("nan"), "s"), True),
        (Stated(True, ""), Stated(1.0, ""), False),
        (Stated("[1,2]", ""), Stated("[1,2]", ""), True),
        (Stated(9007199254740993, ""), Stated(9007199254740992.0, ""), False),
    ],
)
def test_settings_are_equal_whatever_their_units(one: Stated, other: Stated, same: bool) -> None:
    assert one.same(other) is same


STEPS = st.lists(
    st.tuples(st.sampled_from("abc"), st.fixed_dictionaries({"duration": st.sampled_from([1.0, 2.0])}))
)


def common(one: list[str], other: list[str]) -> int:
    """Return the length of the longest common subsequence, by its definition."""
    if not one or not other:
        return 0
    if one[0] == other[0]:
        return 1 + common(one[1:], other[1:])
    return max(common(one[1:], other), common(one, other[1:]))


@given(STEPS.filter(lambda s: len(s) < 7), STEPS.filter(lambda s: len(s) < 7))
def test_every_step_of_both_is_accounted_for(old: list[Any], new: list[Any]) -> None:
    one, other = run_of(*old), run_of(*new)
    changes, _, renumbered = compare_runs(one, other)
    whole = [(name, "kept") for name, _ in old]
    fresh = sum(change.kind == "added" for change in changes)
    gone = sum(change.kind == "removed" for change in changes)
    assert len(whole) - gone == len(new) - fresh
    places = [change.new_place for change in changes if change.new_place is not None]
    assert places == sorted(places)
    assert len({change.old_place for change in changes if change.old_place}) == sum(
        change.old_place is not None for change in changes
    )
    again = sum(change.kind in ("moved", "renamed") for change in changes)
    paired = len(old) - gone - again
    assert paired == common([name for name, _ in old], [name for name, _ in new])
    assert len(renumbered) <= paired


def test_the_structure_as_it_is_stored() -> None:
    steps = parse_structure('[["load",["duration","power"]],["ramp#2",["power","duration"]],["x#y",[]]]')
    assert [(step.name, step.settings, step.timed, step.base) for step in steps] == [
        ("load", ("power",), True, "load"),
        ("ramp#2", ("power",), True, "ramp"),
        ("x#y", (), False, "x#y"),
    ]
