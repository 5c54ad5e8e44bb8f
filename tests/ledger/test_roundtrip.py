"""Whatever record goes in comes out equal in value, kind and unit, however it arrived."""

from __future__ import annotations

import json
import math
import os
import shutil
import tempfile
import unicodedata
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import suppress
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from nightfold.ledger.shot import ShotView
from nightfold.ledger.writing import Writer
from nightfold.opening import create_store, open_store
from nightfold.store import Store

Record = dict[str, Any]
MORE = int(os.environ.get("NIGHTFOLD_MORE_EXAMPLES", "1"))

# ---------------------------------------------------------------- what is put in

FLOATS = st.one_of(st.floats(), st.sampled_from([0.0, -0.0, 1.0, math.nan, math.inf, -math.inf, 0.1, 5e-324]))
WHOLE = st.one_of(
    st.integers(-3, 3),
    st.sampled_from([2**53, 2**53 + 1, -(2**63), 10**17, 10**25 + 1, 2**60]),
    st.integers(),
).filter(lambda number: abs(number) < 10**300)
NUMBERS = st.one_of(
    FLOATS, WHOLE, WHOLE.filter(lambda n: abs(n) < 2**62).map(np.int64), FLOATS.map(np.float64),
    st.floats(width=32).map(np.float32), st.integers(0, 9).map(np.uint8),
)  # fmt: skip
PLAIN = st.one_of(st.integers(-100, 100), st.floats(-1e6, 1e6))
TEXTS = st.one_of(
    st.sampled_from(["x", "y", "", "é", "e\u0301", "🌡", "nan", "1", "true", 'say "x"', "a\nb", " x "]),
    st.text(st.characters(exclude_characters="\0", exclude_categories=["Cs"]), max_size=8),
)
LISTS = st.lists(st.one_of(st.integers(-9, 9), st.floats(-5, 5), st.just(1e16)), max_size=4)


def with_unit(values: st.SearchStrategy[Any], units: Sequence[str]) -> st.SearchStrategy[Any]:
    stated = st.builds(lambda value, unit: {"value": value, "unit": unit}, values, st.sampled_from(units))
    return st.one_of(values, stated, stated, values.map(lambda value: {"value": value}))


NOTHING = st.sampled_from([None, {"value": None}])
FACTORS = {"": Fraction(1), "ms": Fraction(1, 1000), "s": Fraction(1), "us": Fraction(1, 10**6)}
SETTINGS: dict[str, st.SearchStrategy[Any]] = {
    "wild": NUMBERS,
    "steady": st.sampled_from([1, 1.0, np.float64(1), 2]),
    "hold time": with_unit(PLAIN, ["ms", "s", "us"]),
    "delay": with_unit(st.sampled_from([0, 1, 5.0]), ["ms", "s"]),
    "axis": TEXTS,
    "on": st.sampled_from([True, False, np.bool_(True)]),
    "ramp": st.one_of(LISTS, LISTS.map(tuple), LISTS.map(lambda values: np.array(values, dtype=float))),
    "größe 🌡": st.one_of(FLOATS.map(lambda value: {"value": value}), WHOLE),
}
READINGS: dict[str, st.SearchStrategy[Any]] = {
    "atoms": st.one_of(
        st.none(), FLOATS, st.builds(lambda v, e: {"value": v, "stderr": e}, FLOATS, st.floats(0))
    ),
    "temperature": with_unit(st.floats(0, 1e3), ["nK", "uK"]),
}


@st.composite
def records(draw: st.DrawFn, most: int = 12) -> list[Record]:
    """Return records of two sequences with times of their own, in order of arrival; few settings change at a time."""
    seconds = draw(st.lists(st.integers(0, 7200), min_size=1, max_size=most, unique=True))
    standing: dict[str, dict[str, Any]] = {"one": {}, "two": {}}
    made = []
    for second in seconds:
        sequence = draw(st.sampled_from(["one", "two"]))
        settings = standing[sequence]
        for name in draw(st.lists(st.sampled_from([*SETTINGS]), max_size=3, unique=True)):
            if draw(st.integers(0, 9)) == 0:
                settings.pop(name, None)
            else:
                settings[name] = draw(st.one_of(*[SETTINGS[name]] * 6, NOTHING))
        stated = [name for name, raw in settings.items() if not is_nothing(raw)]
        label = draw(st.sampled_from([None, None, "a", "b"]))
        swept = draw(st.lists(st.sampled_from(stated), max_size=2, unique=True)) if stated else []
        made.append({
            "machine": "heron", "sequence": sequence, "scan": label, "swept": swept, "uid": f"shot {second}",
            "started": f"2026-10-05T{20 + second // 3600}:{second // 60 % 60:02d}:{second % 60:02d}Z",
            "parameters": dict(settings),
            "observables": {name: draw(READINGS[name]) for name in READINGS if draw(st.booleans())},
        })  # fmt: skip
    return made


def is_nothing(raw: Any) -> bool:
    return raw is None or (isinstance(raw, Mapping) and raw["value"] is None)


# ---------------------------------------------------------------- what must come out


def units_adopted(arrived: Sequence[Record], part: str) -> dict[str, str]:
    """Return the unit of every name: the first one stated, in order of arrival."""
    units: dict[str, str] = {}
    for record in arrived:
        for name, raw in record[part].items():
            if isinstance(raw, Mapping) and raw.get("unit"):
                units.setdefault(name, raw["unit"])
    return units


def expected(raw: Any, unit: str) -> Any:
    value, stated = (raw["value"], raw.get("unit")) if isinstance(raw, Mapping) else (raw, None)
    if isinstance(value, str):
        return unicodedata.normalize("NFC", value)
    if isinstance(value, (list, tuple)) or getattr(value, "ndim", None):
        return [float(item) for item in value]
    if isinstance(value, (bool, np.bool_)):
        return bool(value)
    if stated and stated != unit:
        return float(Fraction(float(value)) * FACTORS[stated] / FACTORS[unit])
    return value


def agrees(found: Any, wanted: Any, converted: bool = False) -> bool:
    """Return whether a value is the one wanted, in kind too; a conversion may cost the last of 15 digits."""
    if isinstance(wanted, list):
        return [float(item) for item in json.loads(found)] == wanted
    if isinstance(wanted, (str, bool)):
        return type(found) is type(wanted) and bool(found == wanted)
    if isinstance(found, (str, bool)) or not isinstance(found, (int, float)):
        return False
    if wanted != wanted:
        return found != found
    if converted:
        return math.isclose(found, wanted, rel_tol=2e-15, abs_tol=5e-324)
    return bool(found == int(wanted)) if isinstance(wanted, np.integer) else bool(found == wanted)


def check(store: Store, arrived: Sequence[Record]) -> None:
    units = units_adopted(arrived, "parameters")
    shots = {record["uid"]: store.shot(record["uid"]) for record in arrived}
    for record in arrived:
        shot = shots[record["uid"]]
        wanted = {name: raw for name, raw in record["parameters"].items() if not is_nothing(raw)}
        assert shot.parameters.keys() == wanted.keys()
        assert (shot.sequence, shot.scan is None or shot.scan.split("#")[0].isdigit() or record["scan"]) != (
            "",
            None,
        )
        for name, raw in wanted.items():
            unit = units.get(name, "")
            stated = raw.get("unit") if isinstance(raw, Mapping) else None
            own = shot.parameters[name]
            assert own.unit == unit
            assert agrees(own.value, expected(raw, unit), bool(stated) and stated != unit), (name, raw, own)
            assert own.swept == (name in record["swept"])
        check_readings(shot, record)
    check_table(store, shots, arrived)


def check_readings(shot: ShotView, record: Record) -> None:
    readings = shot.observables
    assert readings.keys() == record["observables"].keys()
    raw = record["observables"].get("atoms", 0.0)
    if "atoms" in readings:
        value, stderr = (raw["value"], raw["stderr"]) if isinstance(raw, Mapping) else (raw, None)
        assert agrees(readings["atoms"].value, math.nan if value is None else value)
        assert readings["atoms"].stderr == stderr


def check_table(store: Store, shots: Mapping[str, ShotView], arrived: Sequence[Record]) -> None:
    """The table of all shots must say the same as one shot after the other, in order of time."""
    names = [name for name in SETTINGS if name in set(store.parameters().name)]
    table = store.shots(names)
    ordered = sorted(arrived, key=lambda record: str(record["started"]))
    assert list(table.uid) == [record["uid"] for record in ordered]
    for uid, *row in table[["uid", *names]].itertuples(index=False):
        own = shots[uid].parameters
        for name, value in zip(names, row, strict=True):
            if name not in own:
                assert value is None or value != value
            else:
                assert value == own[name].value or value != value, (uid, name)


# ---------------------------------------------------------------- the ways in

Way = Callable[[Callable[[], Store], list[Record]], None]


def in_batches(new: Callable[[], Store], made: list[Record]) -> None:
    with new() as store:
        for start in range(0, len(made), 7):
            outcome = store.take(made[start : start + 7])
            assert (outcome.refused, outcome.new) == ([], len(made[start : start + 7]))
        check(store, made)
        assert store.take(made).known == len(made)


def in_new_processes(new: Callable[[], Store], made: list[Record]) -> None:
    for start in range(0, len(made), 4):
        with new() as store:
            store.take(iter(made[start : start + 4]))
    with new() as store:
        check(store, made)


def by_two_writers(new: Callable[[], Store], made: list[Record]) -> None:
    with new() as one, new() as other:
        for number, record in enumerate(made):
            outcome = (one, other)[number % 2].take([record])
            assert (outcome.new, outcome.refused) == (1, [])
        check(one, made)
        check(other, made)
        assert other.take(made).known == len(made)


def with_a_broken_source(new: Callable[[], Store], made: list[Record]) -> None:
    def source() -> Iterator[Record]:
        yield from made[: len(made) // 2]
        raise ConnectionError

    with new() as store:
        with suppress(ConnectionError):
            store.take(source())
        outcome = store.take(made)
        assert outcome.known + outcome.new == len(made)
        check(store, made)


def with_a_rollback(new: Callable[[], Store], made: list[Record]) -> None:
    """Fail at the very end of the second transaction, then hand over everything again in another order of batches."""
    with new() as store:
        first = made[: len(made) // 3]
        store.take(first)
        flush, fold = Writer._flush, store._writer._placer.fold

        def fail(self: Writer, batch: Any) -> None:
            flush(self, batch)
            raise ConnectionError

        with pytest.MonkeyPatch.context() as patch:
            patch.setattr(Writer, "_flush", fail)
            with suppress(ConnectionError):
                store.take(made[len(made) // 3 :])
        assert store._writer._placer.fold == fold
        assert len(store.shots(set_aside=True)) == len(first)
        with new() as other:
            other.take([*made[len(made) // 3 :]])
        outcome = store.take(made)
        assert (outcome.known, outcome.refused) == (len(made), [])
        check(store, made)


WAYS: list[Way] = [in_batches, in_new_processes, by_two_writers, with_a_broken_source, with_a_rollback]


@pytest.mark.parametrize("way", WAYS)
def test_what_goes_in_comes_out(way: Way, empty_store: Path) -> None:
    @settings(max_examples=5 * MORE)
    @given(records())
    def holds(made: list[Record]) -> None:
        with tempfile.TemporaryDirectory() as folder:
            path = Path(folder) / "store.sqlite"
            shutil.copy(empty_store, path)
            way(lambda: open_store(path), made)

    holds()


@pytest.mark.parametrize("way", WAYS)
def test_what_goes_in_comes_out_of_postgresql(way: Way, new_schema: Callable[[], str]) -> None:
    @settings(max_examples=MORE)
    @given(records(8))
    def holds(made: list[Record]) -> None:
        url = new_schema()
        create_store(url).close()
        way(lambda: open_store(url), made)

    holds()


def content(store: Store) -> list[tuple[Any, ...]]:
    """Return what a store says of its shots, without their numbers."""
    table = store.shots()
    return [
        (uid, str(started), sequence, scan,
         sorted((name, repr(item.value), item.unit, item.swept) for name, item in store.shot(uid).parameters.items()))
        for uid, started, sequence, scan in table.itertuples(index=False)
    ]  # fmt: skip


@settings(max_examples=5 * MORE)
@given(st.data())
def test_the_order_of_arrival_never_shows(empty_store: Path, data: st.DataObject) -> None:
    made = data.draw(records())
    for record in made:  # units must not depend on who comes first, nor labels on rounds
        record["scan"] = None
        for part in ("parameters", "observables"):
            record[part] = {
                name: raw["value"] if isinstance(raw, Mapping) and "unit" in raw else raw
                for name, raw in record[part].items()
            }
    orders = [made, data.draw(st.permutations(made)), sorted(made, key=lambda record: str(record["started"]))]
    found = []
    with tempfile.TemporaryDirectory() as folder:
        for number, order in enumerate(orders):
            path = Path(folder) / f"{number}.sqlite"
            shutil.copy(empty_store, path)
            with open_store(path) as store:
                for start in range(0, len(order), 6):
                    assert store.take(order[start : start + 6]).refused == []
                shots = [row[:3] + row[4:] for row in content(store)]
                edits = store.edits()[["at", "parameter", "sequence"]].astype(str).to_numpy().tolist()
                found.append((shots, grouping(store), edits))
    assert found[0] == found[2], "out of order and in order"
    assert found[1] == found[2], "permuted and in order"


def grouping(store: Store) -> list[tuple[tuple[str, ...], tuple[str, ...]]]:
    """Return the shots and axes of every scan."""
    return sorted(
        (tuple(sorted(scan.table().uid)), tuple(sorted(axis.parameter for axis in scan.axes)))
        for scan in store.scans()
    )
