"""Records taken: new, known, amending; names, cards, and what Python hands over."""

from __future__ import annotations

import re
from decimal import Decimal
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from sqlalchemy import func, select

from nightfold import tables
from nightfold.errors import CardError
from nightfold.opening import open_store
from nightfold.store import Store


def record(number: int = 0, **changes: Any) -> dict[str, Any]:
    """Return a shot record, `number` minutes into a night."""
    base: dict[str, Any] = {
        "machine": "heron",
        "started": f"2026-10-05T{20 + number // 60:02d}:{number % 60:02d}:00+00:00",
        "sequence": "hold",
        "parameters": {"coil": 1.5, "hold": 20},
    }
    return {**base, **changes}


def count(store: Store) -> dict[str, int]:
    """Return how many rows every table has."""
    with store._session.reading() as connection:
        return {
            name: connection.execute(select(func.count()).select_from(table)).scalar_one()
            for name, table in tables.metadata.tables.items()
            if name != "turn"
        }


def reasons(store: Store, *records: Any) -> list[str]:
    return [item.reason for item in store.take(records).refused]


# ---------------------------------------------------------------- known and amended


def test_everything_taken_again_is_known(anywhere: str) -> None:
    records = [record(n, observables={"atoms": 1e5 + n, "width": None}) for n in range(30)]
    records += [
        record(40, uid="a", note="odd", failed="no atoms", frames=[frame()], scan="x", swept=["coil"])
    ]
    with open_store(anywhere) as store:
        assert store.take(records).new == 31
        before = count(store)
        for again in (records, records[::-1]):
            outcome = store.take(again)
            assert (outcome.new, outcome.known, outcome.amended, outcome.refused) == (0, 31, 0, [])
        with open_store(anywhere) as other:
            assert other.take(records).known == 31
        assert count(store) == before


def frame(**changes: str) -> dict[str, str]:
    return {"camera": "side", "role": "atoms", "path": "frames/1.tif", **changes}


def test_several_records_twice_in_one_batch(anywhere: str) -> None:
    """As a file has them whose writer repeats its tail after a restart."""
    order = [0, 1, 2, 3, 4, 3, 4, 2, 5, 6, 5, 6, 0]
    with open_store(anywhere) as store:
        outcome = store.take([record(n, uid=f"shot {n}") for n in order])
        assert (outcome.new, outcome.known, outcome.refused) == (7, 6, [])
        assert sorted(store.shots().uid) == [f"shot {n}" for n in range(7)]


def test_the_same_record_twice_in_one_batch(store: Store) -> None:
    one = record(0)
    outcome = store.take([one, one, record(1), one])
    assert (outcome.new, outcome.known) == (2, 2)


@pytest.mark.parametrize("whole", [True, False])
def test_an_amendment_and_then_the_original_again(anywhere: str, whole: bool) -> None:
    original = record(0, uid="u", observables={"atoms": {"value": 1e5, "stderr": 100}, "width": 3.0})
    later = {"format": 1, "uid": "u", "observables": {"atoms": {"value": 2e5, "stderr": 50}, "depth": 0.7}}
    if whole:
        later = record(0, **later)
    with open_store(anywhere) as store:
        store.take([original])
        assert store.take([later]).amended == 1
        for again in (original, later):
            assert store.take([again]).known == 1
            found = store.shot("u").observables
            assert {name: (item.value, item.stderr) for name, item in found.items()} == {
                "atoms": (2e5, 50.0),
                "width": (3.0, None),
                "depth": (0.7, None),
            }
        with store._session.reading() as connection:
            past = connection.execute(select(tables.past_reading)).all()
        assert [(row.value, row.stderr) for row in past] == [(1e5, 100.0)]


def test_an_amendment_comes_in_the_same_batch_as_its_shot(store: Store) -> None:
    outcome = store.take([record(0, uid="u"), {"uid": "u", "observables": {"atoms": 5}}])
    assert (outcome.new, outcome.amended) == (1, 1)
    assert store.shot("u").observables["atoms"].value == 5


def test_an_amendment_keeps_its_derivation(store: Store) -> None:
    store.take([record(0, uid="u", observables={"atoms": 5})])
    fit = {"name": "gauss", "version": "2", "settings": {"region": [0, 1]}}
    assert store.take([{"uid": "u", "observables": {"atoms": 5}, "derivation": fit}]).amended == 1
    assert store.shot("u").observables["atoms"].derivation == "gauss"
    assert store.take([{"uid": "u", "observables": {"atoms": 5}, "derivation": fit}]).known == 1


def test_a_failure_told_later_sets_the_shot_aside(store: Store) -> None:
    store.take([record(0, uid="u")])
    assert store.take([record(0, uid="u", failed="no atoms")]).amended == 1
    assert store.shot("u").set_aside == "no atoms"
    store.put_back(["u"])
    assert store.take([record(0, uid="u", failed="no atoms")]).known == 1
    assert store.shot("u").set_aside is None


def test_notes_and_frames_are_added(store: Store) -> None:
    store.take([record(0, uid="u", note="one", frames=[frame()])])
    assert store.take([record(0, uid="u", note="two", frames=[frame(role="dark")])]).amended == 1
    shot = store.shot("u")
    assert shot.notes == ("one", "two")
    assert [item[1] for item in shot.frames] == ["atoms", "dark"]


def test_a_reference_shot_with_a_label_can_be_amended(store: Store) -> None:
    store.take([record(0, uid="u", reference=True, scan="coarse")])
    outcome = store.take([record(0, uid="u", reference=True, scan="coarse", observables={"atoms": 3})])
    assert outcome.refused == []
    assert outcome.amended == 1


# ---------------------------------------------------------------- names

NAMES = ["a b", "größe", "🌡 oven", 'say "x"', "it's", "%s", "a;drop table shot", "λ[up]", "select", "x" * 200]


@pytest.mark.parametrize("name", NAMES)
def test_names_of_every_kind(anywhere: str, name: str) -> None:
    own = record(0, uid="u", parameters={name: 5})
    longer = name + "!" if len(name) < 200 else "n"
    if len(name) < 200:
        own |= {"machine": name, "sequence": name, "scan": name, "swept": [name]}
    own["observables"] = {longer: 1}
    with open_store(anywhere) as store:
        assert store.take([own]).refused == []
        shot = store.shot("u")
        assert shot.parameters[name].value == 5
        assert shot.observables[longer].value == 1
        assert list(
            store.shots([name], [longer], machine=own["machine"], sequence=own["sequence"])[name]
        ) == [5]
        if len(name) < 200:
            assert (shot.machine, shot.sequence, shot.scan) == (name, name, f"{name}#1")


def test_names_are_composed(store: Store) -> None:
    store.take([record(0, parameters={"é": 1}), record(1, parameters={"é": 2})])
    assert list(store.parameters().name) == ["é"]


# ---------------------------------------------------------------- the card


CARD = """
machine = "heron"
zone = "Europe/Vienna"
naive_times = {naive}
[parameters.coil]
unit = "A"
[parameters.mode]
kind = "text"
[observables.atoms]
unit = "atoms"
"""


def use_card(store: Store, folder: Path, naive: bool = False) -> None:
    path = folder / "heron.toml"
    path.write_text(CARD.format(naive=str(naive).lower()))
    store.use_card(path)


def test_a_unit_that_contradicts_the_card(store: Store, tmp_path: Path) -> None:
    use_card(store, tmp_path)
    found = reasons(
        store,
        record(0, parameters={"coil": {"value": 1, "unit": "V"}}),
        record(1, parameters={"coil": "high"}),
        record(2, parameters={"mode": 3}),
        record(3, observables={"atoms": {"value": 1, "unit": "nK"}}),
        record(4, observables={"coil": 3}, parameters={}),
        record(5, parameters={"atoms": 3}),
    )
    assert found[0].startswith("parameters.coil.unit: found 'V', wanted a unit that converts to A")
    assert found[1].startswith("parameters.coil: found 'high' (text), wanted a number")
    assert found[2].startswith("parameters.mode: found 3.0 (number), wanted a text")
    assert found[3].startswith("observables.atoms.unit: found 'nK'")
    assert found[4].startswith("observables.coil: found an observable")
    assert found[5].startswith("parameters.atoms: found a parameter")
    assert store.parameters().empty


def test_bare_numbers_take_the_unit_of_the_card(store: Store, tmp_path: Path) -> None:
    use_card(store, tmp_path)
    bare = record(0, uid="u", parameters={"coil": 2}, observables={"atoms": 5})
    store.take([bare, record(1, uid="v", parameters={"coil": {"value": 300, "unit": "mA"}})])
    shot = store.shot("u")
    assert (shot.parameters["coil"].value, shot.parameters["coil"].unit) == (2, "A")
    assert (shot.observables["atoms"].value, shot.observables["atoms"].unit) == (5, "atoms")
    assert store.shot("v").parameters["coil"].value == 0.3


def test_naive_times_where_the_card_allows_them(store: Store, tmp_path: Path) -> None:
    use_card(store, tmp_path, naive=True)
    outcome = store.take(
        [
            record(0, uid="summer", started="2026-10-24T23:30:00"),
            record(0, uid="repeated", started="2026-10-25T02:30:00"),
            record(0, uid="skipped", started="2026-03-29T02:30:00"),
            record(0, uid="stated", started="2026-10-25T02:30:00+01:00"),
            record(0, uid="winter", started="2026-10-25T03:00:00"),
        ]
    )
    assert outcome.new == 3
    assert [item.line for item in outcome.refused] == [2, 3]
    assert "the clocks of Europe/Vienna show this hour twice" in outcome.refused[0].reason
    assert "the clocks of Europe/Vienna leave this hour out" in outcome.refused[1].reason
    assert store.shot("summer").started.isoformat() == "2026-10-24T21:30:00+00:00"
    assert store.shot("stated").started.isoformat() == "2026-10-25T01:30:00+00:00"
    assert store.shot("winter").started.isoformat() == "2026-10-25T02:00:00+00:00"


# ---------------------------------------------------------------- what comes in from Python


def test_arrays_and_numpy_scalars(store: Store) -> None:
    values = {
        "whole": np.int64(7), "small": np.float32(0.5), "on": np.bool_(True), "text": np.str_("é"),
        "ramp": np.array([1.0, 2.5]), "zero_d": np.array(5.0), "pair": (1, 2), "boxed": {"value": np.array([1, 2])},
        "exact": Decimal("0.5"), "ratio": Fraction(1, 4),
    }  # fmt: skip
    outcome = store.take([record(n, uid=f"shot{n}", parameters=dict(values)) for n in range(3)])
    assert outcome.refused == []
    found = {name: item.value for name, item in store.shot("shot2").parameters.items()}
    assert found == {
        "whole": 7, "small": 0.5, "on": True, "text": "é", "ramp": "[1,2.5]", "zero_d": 5, "pair": "[1,2]",
        "boxed": "[1,2]", "exact": 0.5, "ratio": 0.25,
    }  # fmt: skip
    assert store.take([record(1, uid="shot1", parameters=dict(values))]).known == 1


def test_a_generator_may_reuse_its_record(store: Store) -> None:
    shared: dict[str, Any] = record(0)
    ramp: list[int] = []

    def records() -> Any:
        for n in range(5):
            ramp.append(n)
            shared["uid"] = f"shot{n}"
            shared["started"] = f"2026-10-05T20:00:0{n}Z"
            shared["parameters"] = {"ramp": ramp, "n": {"value": n}}
            yield shared

    store.take(records())
    assert [store.shot(f"shot{n}").parameters["ramp"].value for n in range(3)] == ["[0]", "[0,1]", "[0,1,2]"]


def test_one_record_alone_is_a_mistake(store: Store) -> None:
    with pytest.raises(
        TypeError, match=r"take: found one dict, wanted an iterable of records such as \[record\]"
    ):
        store.take(record(0))  # type: ignore[arg-type]


def test_large_whole_numbers_equal_the_floats_they_equal(store: Store) -> None:
    for n, (one, same) in enumerate(
        [(10**17, 1e17), (2**53 + 2, float(2**53 + 2)), (2**60, np.float64(2**60))]
    ):
        store.take([record(n, uid=f"u{n}", parameters={"a": one})])
        assert store.take([record(n, uid=f"u{n}", parameters={"a": same})]).known == 1
        assert store.shot(f"u{n}").parameters["a"].value == one


def test_uids_derived_differ_with_settings_and_time(store: Store) -> None:
    other = record(0, parameters={"coil": 1.5, "hold": 21})
    outcome = store.take([record(0), record(1), other, record(0, sequence="x"), record(0, machine="x")])
    assert (outcome.new, store.shots().uid.nunique()) == (5, 5)
    assert store.take([record(0, observables={"n": 1})]).amended == 1


def test_progress_and_an_empty_iterable(store: Store) -> None:
    seen: list[int] = []
    store.take((record(n % 60, uid=f"u{n}") for n in range(40)), progress=seen.append)
    assert seen == sorted(seen)
    assert seen[-1] == 40
    outcome = store.take([])
    assert (outcome.new, outcome.known, outcome.amended, outcome.refused) == (0, 0, 0, [])


def test_a_clock_going_backwards_is_no_reason_to_refuse(store: Store) -> None:
    assert store.take([record(n) for n in (5, 4, 9, 1)]).new == 4
    assert list(store.shots().started) == sorted(store.shots().started)


@pytest.mark.parametrize(
    ("entry", "message"),
    [
        (
            "[observables.coil]",
            "observables.coil: found an entry, wanted none: the store has a parameter of that name",
        ),
        (
            "[parameters.atoms]",
            "parameters.atoms: found an entry, wanted none: the store has an observable of that",
        ),
        (
            '[parameters.coil]\nunit = "V"',
            "parameters.coil.unit: found 'V', wanted 'A', in which the store holds it",
        ),
        ('[parameters.hold]\nkind = "text"', "parameters.hold.kind: found text, the store has number"),
    ],
)
def test_a_card_that_contradicts_the_store(store: Store, tmp_path: Path, entry: str, message: str) -> None:
    store.take(
        [record(0, parameters={"coil": {"value": 1, "unit": "A"}, "hold": 2}, observables={"atoms": 1})]
    )
    path = tmp_path / "card.toml"
    path.write_text(f'machine = "heron"\n{entry}\n')
    with pytest.raises(CardError, match=re.escape(message)):
        store.use_card(path)
    assert store.cards() == {}


# ---------------------------------------------------------------- found by review


def test_a_setting_that_the_caller_changes_and_hands_over_again(store: Store) -> None:
    current = {"value": 1.5, "unit": "A"}
    for number in range(4):
        current["value"] = 1.5 + number
        store.take([record(number, parameters={"coil": current})])
    assert store.shots(["coil"]).coil.tolist() == [1.5, 2.5, 3.5, 4.5]


def test_a_refused_twin_leaves_nothing_in_memory(store: Store) -> None:
    store.take([record(0, uid="a", parameters={"p": 1})])
    outcome = store.take(
        [record(0, uid="a", parameters={"p": 1, "q": 5}), record(1, uid="b", parameters={"p": 1, "q": 5})]
    )
    assert (outcome.new, len(outcome.refused)) == (1, 1)
    assert store.shots(["q"]).q.dropna().tolist() == [5]


def test_a_refused_twin_does_not_keep_its_unit(store: Store) -> None:
    store.take([record(0, uid="a", parameters={"q": 1})])
    milli = {"q": {"value": 5, "unit": "mA"}}
    store.take([record(0, uid="a", parameters=milli), record(1, uid="b", parameters=milli)])
    store.take([record(2, uid="c", parameters={"q": {"value": 2, "unit": "A"}})])
    assert store.shot("b").parameters["q"].value == 5
    assert store.shot("b").parameters["q"].unit == "mA"
    assert store.shot("c").parameters["q"].value == 2000


def test_null_in_a_whole_record_does_not_take_a_value_back(store: Store) -> None:
    store.take([record(0, uid="a", observables={"t": 5.0})])
    outcome = store.take([record(0, uid="a", observables={"t": None, "n": 2.0, "w": None})])
    assert outcome.amended == 1
    assert store.shot("a").observables["t"].value == 5.0
    assert store.shot("a").observables["w"].state == "null"
    store.take([{"uid": "a", "observables": {"t": None}}])
    assert store.shot("a").observables["t"].value == 5.0
    store.take([{"uid": "a", "observables": {"t": None}, "derivation": "fit"}])  # an analysis found no value
    assert store.shot("a").observables["t"].state == "null"


def test_stderr_as_an_observable_of_its_own_belongs_to_its_value(store: Store) -> None:
    store.take([record(0, uid="a", observables={"n": 10.0, "n_stderr": 0.5})])
    assert store.shot("a").observables["n"].stderr == 0.5
    assert list(store.shot("a").observables) == ["n"]


def test_the_card_used_last_is_in_force_after_the_clock_was_put_back(
    store: Store, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    card = tmp_path / "heron.toml"
    for zone, now in (("Asia/Tokyo", 10), ("Europe/Vienna", 5)):
        card.write_text(f'machine = "heron"\nzone = "{zone}"\n')
        monkeypatch.setattr("nightfold.faces.taking.now_us", lambda now=now: now)
        store.use_card(card)
    assert store.cards()["heron"].zone == store.zone("heron") == "Europe/Vienna"
