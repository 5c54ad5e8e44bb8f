"""Corrected settings: appended, exact, and never at the cost of any other shot."""

from __future__ import annotations

import math
import os
import random
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from sqlalchemy import func, select

from nightfold import tables
from nightfold.errors import NotFound, RecordError, RequestError
from nightfold.opening import open_store
from nightfold.settings import digest_of_sum, hash_setting, token_of
from nightfold.store import Store

MORE = int(os.environ.get("NIGHTFOLD_MORE_EXAMPLES", "1"))

START = datetime(2026, 10, 5, 18, tzinfo=UTC)
HUGE = 2**70 + 1


def shot(number: int, **changes: Any) -> dict[str, Any]:
    parameters = {
        "coil_current": {"value": 60 + number % 10 / 10, "unit": "A"}, "hold": {"value": 0.12, "unit": "s"},
        "axis": "x", "repump": True, "seed": HUGE, "dead": math.nan, "ramp": [1, 2.5],
    }  # fmt: skip
    return {
        "uid": f"shot{number:03d}", "machine": "heron", "sequence": "hold",
        "started": (START + timedelta(seconds=20 * number)).isoformat(), "parameters": parameters,
        "observables": {"n": 1000.0 + number}, **changes,
    }  # fmt: skip


def values(store: Store, uid: str) -> dict[str, Any]:
    return {name: part.value for name, part in store.shot(uid).parameters.items()}


def check_digests(store: Store) -> None:
    """Make the digest of every shot and every set anew, from its rows."""
    with store._session.reading() as connection:
        names = {row.id: row for row in connection.execute(select(tables.parameter))}
        machine = hash_setting(connection.execute(select(tables.machine.c.name)).scalar_one(), "machine")

        def total(rows: Any) -> int:
            return sum(
                hash_setting(
                    names[row.parameter_id].name,
                    token_of(names[row.parameter_id].kind, row.num, row.exact),
                )
                for row in rows
            )

        rest, move, whole = tables.set_value, tables.shot_value, tables.value_set
        sums = {}
        for row in connection.execute(select(whole)).all():
            rows = connection.execute(select(rest).where(rest.c.set_id == row.id)).all()
            assert len(rows) == row.n
            sums[row.id] = total(rows)
            assert digest_of_sum(sums[row.id] + machine) == bytes(row.digest)
        for row in connection.execute(select(tables.shot)).all():
            moving = connection.execute(select(move).where(move.c.shot_id == row.id)).all()
            resting = set(
                connection.execute(select(rest.c.parameter_id).where(rest.c.set_id == row.set_id)).scalars()
            )
            assert not resting & {item.parameter_id for item in moving}
            assert digest_of_sum(sums[row.set_id] + total(moving)) == bytes(row.values_digest)


@pytest.mark.parametrize(
    ("name", "new", "found"),
    [
        ("coil_current", {"value": 61350, "unit": "mA"}, 61.35),
        ("hold", {"value": 90, "unit": "ms"}, 0.09),
        ("hold", 0.25, 0.25),
        ("axis", "y", "y"),
        ("repump", False, False),
        ("repump", "false", False),
        ("seed", HUGE + 1, HUGE + 1),
        ("dead", 4.0, 4.0),
        ("ramp", [3, 4], "[3,4]"),
    ],
)
def test_a_setting_of_any_kind_there_and_back(anywhere: str, name: str, new: Any, found: Any) -> None:
    with open_store(anywhere) as store:
        store.take([shot(n, swept=["coil_current"]) for n in range(12)])
        before = [values(store, f"shot{n:03d}") for n in range(12)]
        assert store.correct(["shot004"], {name: new}, "read off the supply", by="ann") == 1
        after = [values(store, f"shot{n:03d}") for n in range(12)]
        assert repr(after[4]) == repr(before[4] | {name: found})
        assert repr(after[:4] + after[5:]) == repr(before[:4] + before[5:])
        assert store.shot("shot004").parameters["coil_current"].swept
        check_digests(store)
        assert store.undo_correction(1) == 1
        assert repr(values(store, "shot004")) == repr(before[4])
        check_digests(store)
        with store._session.reading() as connection:
            rows = connection.execute(select(tables.correction).order_by(tables.correction.c.id)).all()
            digest = connection.execute(
                select(tables.shot.c.values_digest).where(tables.shot.c.uid == "shot004")
            ).scalar_one()
    assert [(row.reason, row.by) for row in rows] == [
        ("read off the supply", "ann"),
        ("undoes correction 1", None),
    ]
    assert (rows[0].old_num, rows[0].old_exact) == (rows[1].new_num, rows[1].new_exact)
    assert bytes(rows[0].old_digest) == bytes(digest)


@pytest.mark.parametrize("value", [math.nan, math.inf, -math.inf, {"value": math.nan, "unit": "s"}])
def test_what_was_really_set_is_finite(store: Store, value: Any) -> None:
    store.take([shot(0)])
    with pytest.raises(RecordError, match=r"parameters.hold: found -?(nan|inf), wanted a finite number"):
        store.correct(["shot000"], {"hold": value}, "why")


def swept(store: Store) -> None:
    store.take([shot(n, scan="loss", swept=["coil_current"]) for n in range(10)])


def test_an_axis_is_not_made_one_value_by_a_slip(anywhere: str) -> None:
    with open_store(anywhere) as store:
        swept(store)
        before = store.shots(["coil_current"]).coil_current.tolist()
        with pytest.raises(
            RequestError, match=r"scan loss#1: coil_current is an axis of it, with 10 values; one va"
        ):
            store.correct([], {"coil_current": 60.5}, "slip", scan="loss")
        assert store.shots(["coil_current"]).coil_current.tolist() == before
        done = store.correct([], {"coil_current": 60.5}, "slip", scan="loss", even_if_swept=True)
        assert (done, len(done.changes)) == (9, 9)  # one had it so
        assert done.number is not None
        back = store.undo_correction(done.number, by="bob")
        assert (back, back.changes[0].new, back.changes[0].uid) == (9, 60.0, "shot000")
        assert store.shots(["coil_current"]).coil_current.tolist() == before
        assert store.scan("loss").axes[0].points == 10
        events = [event for event in store.history("shot000").events if event.kind == "corrected"]
        assert [(event.number, event.by) for event in events] == [(done.number, None), (back.number, "bob")]
        check_digests(store)
        assert back.number is not None
        assert store.undo_correction(back.number) == 9  # as it was before it was undone
        assert set(store.shots(["coil_current"]).coil_current) == {60.5}


def test_what_cannot_be_undone(anywhere: str) -> None:
    with open_store(anywhere) as store:
        swept(store)
        with pytest.raises(
            NotFound, match="correction 4: there is none of that number; nothing was corrected"
        ):
            store.undo_correction(4)
        first = store.correct(["shot001", "shot002"], {"hold": 0.2, "axis": "y"}, "why").number
        second = store.correct(["shot002"], {"hold": 0.3}, "why").number
        assert first is not None
        assert second is not None
        with pytest.raises(NotFound, match=f"there is none of that number; the newest are {second}, {first}"):
            store.undo_correction(first + 1)
        again = f"correction {first}: hold of shot shot002 was corrected again since, by correction {second}; undo tha"
        with pytest.raises(RequestError, match=again):
            store.undo_correction(first)
        assert set(store.shots(["hold"]).hold) == {0.12, 0.2, 0.3}
        assert store.undo_correction(second) == 1
        assert store.undo_correction(first) == 2
        assert (set(store.shots(["hold"]).hold), set(store.shots(["axis"]).axis)) == ({0.12}, {"x"})
        with pytest.raises(RequestError, match=f"correction {first}: each shot has again what it had before"):
            store.undo_correction(first)


@pytest.mark.parametrize(
    ("shift", "expected"),
    [
        ({"times": 1.2}, [round(60 * 1.2 + 0.12 * n, 10) for n in range(10)]),
        ({"plus": 0.1}, [round(60.1 + n / 10, 10) for n in range(10)]),
        ({"plus": -100, "unit": "mA"}, [round(59.9 + n / 10, 10) for n in range(10)]),
    ],
)
def test_each_shot_by_a_factor_or_an_offset(
    anywhere: str, shift: dict[str, Any], expected: list[float]
) -> None:
    with open_store(anywhere) as store:
        swept(store)
        tried = store.correct([], {"coil_current": shift}, "other range", scan="loss", dry_run=True)
        assert (tried, tried.number) == (10, None)
        assert [change.new for change in tried.changes] == expected
        assert store.shots(["coil_current"]).coil_current.tolist() == [60 + n / 10 for n in range(10)]
        done = store.correct([], {"coil_current": shift}, "other range", scan="loss")
        assert done.changes == tried.changes
        assert store.shots(["coil_current"]).coil_current.tolist() == expected
        check_digests(store)


@pytest.mark.parametrize(
    ("name", "shift", "message"),
    [
        (
            "axis",
            {"times": 2},
            "parameters.axis: found [*]= 2 for text, wanted another value: only numbers have",
        ),
        ("hold", {"times": 0}, "parameters.hold: found 0, wanted a factor, finite and not 0"),
        ("hold", {"plus": math.nan}, "parameters.hold: found nan, wanted a finite number"),
        ("hold", {"plus": 1, "unit": "A"}, "parameters.hold.unit: found 'A', wanted a unit that conv"),
        ("hold", {"times": 1, "unit": "s"}, "wanted either times, or plus with or without unit"),
        ("hold", {"times": 1}, "parameters.hold: found [*]= 1, wanted another value"),
        ("hold", {"times": 1e308}, None),
        (
            "coil_current",
            {"times": 1e308},
            "parameters.coil_current: found 60.* wanted a result that a number can h",
        ),
    ],
)
def test_shifts_that_cannot_be(store: Store, name: str, shift: dict[str, Any], message: str | None) -> None:
    swept(store)
    if message is None:
        assert store.correct([], {name: shift}, "why", scan="loss", dry_run=True) == 10
        return
    with pytest.raises(RecordError, match=message):
        store.correct([], {name: shift}, "why", scan="loss")


def test_a_beginning_that_is_too_short_is_told_so(store: Store) -> None:
    store.take([shot(0)])
    with pytest.raises(
        NotFound, match="shot 'sho': no such uid in this store; as the beginning of one it is too short"
    ):
        store.correct(["sho"], {"hold": 1}, "why")


def test_errors_of_requests_are_ours(store: Store) -> None:
    store.take([shot(0)])
    with pytest.raises(RequestError, match="found no shot"):
        store.correct([], {"hold": 1}, "why")
    with pytest.raises(RequestError, match="found no setting"):
        store.correct(["shot000"], {}, "why")
    with pytest.raises(RequestError, match="found no reason"):
        store.correct(["shot000"], {"hold": 1}, "")
    with pytest.raises(RequestError, match="note: found no subject"):
        store.add_note("x")
    with pytest.raises(RequestError, match="wanted one of"):
        store.add_note("x", shot="shot000", night="2026-10-05")


def test_the_sets_of_many_shots_are_shared(anywhere: str) -> None:
    with open_store(anywhere) as store:
        store.take([shot(n, scan="late", swept=["coil_current"]) for n in range(300)])
        assert store.correct([], {"hold": 0.5, "axis": "z"}, "wrong file", scan="late") == 300
        assert set(store.shots(["hold"]).hold) == {0.5}
        with store._session.reading() as connection:
            sets = connection.execute(select(func.count()).select_from(tables.value_set)).scalar_one()
        assert sets == 2
        assert store.correct("shot000", {"hold": 0.5, "axis": "x"}, "that one") == 1
        check_digests(store)


def test_the_original_record_stays_known_and_can_bring_more(anywhere: str) -> None:
    with open_store(anywhere) as store:
        store.take([shot(n) for n in range(5)])
        store.correct(["shot002"], {"hold": 0.2, "axis": "y"}, "one")
        store.correct(["shot002"], {"hold": 0.3}, "two")
        assert store.take([shot(2)]).known == 1
        assert store.take([shot(2, observables={"n": 1002.0, "width": 4.0})]).amended == 1
        view = store.shot("shot002")
        assert (view.parameters["hold"].value, view.observables["width"].value) == (0.3, 4.0)
        now = shot(2)
        now["parameters"] |= {"hold": {"value": 300, "unit": "ms"}, "axis": "y"}
        outcome = store.take([now])
        assert (outcome.new, outcome.refused) == (0, [])
        now["parameters"]["hold"] = 0.9
        (refused,) = store.take([now]).refused
        assert "parameters.hold: found 0.9, wanted 0.3, as stored under this uid" in refused.reason
        assert len(store.shots()) == 5


def test_a_record_without_a_uid_finds_its_shot_by_either_settings(anywhere: str) -> None:
    def nameless(number: int, **more: Any) -> dict[str, Any]:
        record = shot(number, **more)
        del record["uid"]
        return record

    with open_store(anywhere) as store:
        store.take([nameless(n) for n in range(5)])
        uid = str(store.shots().uid[2])
        store.correct([uid], {"hold": 0.2}, "why")
        assert store.take([nameless(2)]).known == 1
        assert store.take([nameless(2, observables={"n": 1002.0, "width": 4.0})]).amended == 1
        now = nameless(2)
        now["parameters"]["hold"] = 0.2
        assert store.take([now]).new == 0
        assert store.take([now]).known == 1
        assert len(store.shots()) == 5
        now["parameters"]["hold"] = 0.7
        assert store.take([now]).new == 1


def test_shots_stored_later_are_as_they_were_handed_over(anywhere: str) -> None:
    with open_store(anywhere) as store, open_store(anywhere) as other:
        store.take([shot(n) for n in range(30)])
        other.correct(["shot029", "shot012"], {"hold": 0.7, "axis": "y"}, "why")
        for first in range(30, 60, 3):
            store.take([shot(n) for n in range(first, first + 3)])
        store.correct(["shot059"], {"hold": 0.7}, "why")
        store.take([shot(n) for n in range(60, 90)])
        expected = repr(values(store, "shot000") | {"coil_current": 0})
        for number in (*range(12), *range(13, 29), *range(30, 59), *range(60, 90)):
            found = values(store, f"shot{number:03d}")
            assert found["coil_current"] == pytest.approx(60 + number % 10 / 10)
            assert repr(found | {"coil_current": 0}) == expected
        check_digests(store)
        assert store.take([shot(n) for n in range(90)]).known == 90


@pytest.mark.parametrize(
    ("stated", "kind", "message"),
    [
        ({"hold": None}, RecordError, r"shot shot001: parameters.hold: found null, wanted a value"),
        ({"hold": {"value": None}}, RecordError, r"parameters.hold: found null, wanted a value"),
        ({"hold": 0.12}, RecordError, r"shot shot001: parameters.hold: found 0.12 s, wanted another value"),
        ({"holt": 1}, NotFound, r"parameter 'holt': heron has none of that name; it has hold"),
        (
            {"n": 1},
            NotFound,
            r"parameter 'n': it is an observable of heron; a reading is changed by another record",
        ),
        ({"hold": "long"}, RecordError, r"hold: found 'long' \(text\), wanted a number"),
        ({"hold": True}, RecordError, r"hold: found True \(truth\), wanted a number"),
        ({"hold": {"value": 1, "unit": "A"}}, RecordError, r"hold.unit: found 'A', wanted a unit that conv"),
        (
            {"other": 1},
            RecordError,
            r"shot shot001: parameters.other: found 1.0 for a setting that it does not",
        ),
        ({"": 1}, RecordError, r"shot shot001: parameters: found the name ''"),
        ({}, ValueError, r"correct: found no setting"),
    ],
)
def test_clear_refusals_that_change_nothing(
    anywhere: str, stated: dict[str, Any], kind: type[Exception], message: str
) -> None:
    with open_store(anywhere) as store:
        store.take([shot(1), shot(2, parameters={**shot(2)["parameters"], "other": 4})])
        with pytest.raises(kind, match=message):
            store.correct(["shot001", "shot002"], {**stated, "axis": "x"} if stated else {}, "why")
        with store._session.reading() as connection:
            assert connection.execute(select(tables.correction)).all() == []
        check_digests(store)


@pytest.mark.parametrize("reason", ["", "  ", "a\0b"])
def test_a_reason_is_needed(anywhere: str, reason: str) -> None:
    with open_store(anywhere) as store:
        store.take([shot(0)])
        with pytest.raises(ValueError, match=r"correct: found no reason, wanted a few words that say why"):
            store.correct(["shot000"], {"hold": 1}, reason)


def test_all_or_nothing(store: Store) -> None:
    store.take([shot(n) for n in range(3)])
    with pytest.raises(NotFound, match="shot 'nobody'"):
        store.correct(["shot000", "nobody"], {"hold": 1}, "why")
    with pytest.raises(ValueError, match="found no shot"):
        store.correct([], {"hold": 1}, "why")
    assert set(store.shots(["hold"]).hold) == {0.12}
    assert store.correct(["shot000", "shot000"], {"hold": 1}, "why") == 1
    assert store.correct(["shot000", "shot001"], {"hold": 1}, "those that have it stay") == 1


def test_a_unit_is_adopted_as_in_a_record(anywhere: str) -> None:
    with open_store(anywhere) as store:
        store.take([shot(n, parameters={"gain": 3.0}) for n in range(2)])
        store.correct(["shot000"], {"gain": {"value": 4, "unit": "V"}}, "why")
        assert store.shot("shot001").parameters["gain"].unit == "V"
        store.correct(["shot000"], {"gain": {"value": 5000, "unit": "mV"}}, "why")
        assert store.shot("shot000").parameters["gain"].value == 5.0


def test_the_edits_follow(anywhere: str) -> None:
    def edited(number: int) -> dict[str, Any]:
        record = shot(number)
        record["parameters"] |= {"hold": 0.12 if number < 40 else 0.2}
        return record

    with open_store(anywhere) as store:
        store.take([edited(n) for n in range(80)])
        assert len(store.edits().query("parameter == 'hold'")) == 1
        store.correct([f"shot{n:03d}" for n in range(40, 44)], {"hold": 0.12}, "the knob was turned later")
        (edit,) = store.edits().query("parameter == 'hold'").itertuples()
        assert edit.at == START + timedelta(seconds=20 * 44)
        store.correct([f"shot{n:03d}" for n in range(44, 80)], {"hold": 0.12}, "it was never turned")
        assert store.edits().query("parameter == 'hold'").empty


names = st.sampled_from(["coil_current", "hold", "axis", "repump", "seed", "dead"])
pools: dict[str, list[Any]] = {
    "coil_current": [60.0, 61.5, 62.25], "hold": [0.12, 0.5, 1e-9], "axis": ["x", "y", "é"], "repump": [True, False],
    "seed": [HUGE, HUGE + 1, 3], "dead": [1.5, -2.0, 0.0],
}  # fmt: skip


@settings(max_examples=7 * MORE)
@given(
    st.lists(
        st.tuples(st.sets(st.integers(0, 39), min_size=1, max_size=8), names, st.integers(0, 2)), max_size=8
    ),
    st.integers(0, 2**32),
)
def test_corrections_never_change_another_shot(
    tmp_path_factory: pytest.TempPathFactory, steps: list[tuple[set[int], str, int]], seed: int
) -> None:
    dice = random.Random(seed)
    records = []
    for number in range(40):
        record = shot(number, swept=["coil_current"] if number % 3 else [])
        record["parameters"] |= {
            name: dice.choice(pools[name]) for name in ("hold", "axis", "dead") if dice.random() < 0.1
        }
        records.append(record)
    path: Path = tmp_path_factory.mktemp("any") / "s.sqlite"
    with open_store(path, create=True) as store:
        store.take(records[:20])
        expected = {n: values(store, f"shot{n:03d}") for n in range(20)}
        for step, (chosen, name, place) in enumerate(steps):
            if step == len(steps) // 2:
                store.take(records[20:])
                expected |= {n: values(store, f"shot{n:03d}") for n in range(20, 40)}
            there = sorted(chosen & expected.keys())
            new = pools[name][place % len(pools[name])]
            differing = [n for n in there if repr(expected[n][name]) != repr(new)]
            if not differing:
                continue
            assert store.correct([f"shot{n:03d}" for n in there], {name: new}, "why") == len(differing)
            for number in there:
                expected[number] = expected[number] | {name: new}
        store.take(records[20:])
        for number in expected:
            found = values(store, f"shot{number:03d}")
            assert {n: token(v) for n, v in found.items()} == {
                n: token(v) for n, v in expected[number].items()
            }
        check_digests(store)
        assert store.take(records).known == 40


def token(value: Any) -> str:
    return repr(float(value) if isinstance(value, (int, float)) and abs(value) < 2**53 else value)
