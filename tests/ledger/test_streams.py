"""The ingest rule: what moves goes with the shot, what rests is stored once."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest
from sqlalchemy import func, select

from nightfold import tables
from nightfold.ledger.streams import MEMORY
from nightfold.opening import open_store
from nightfold.store import Store

CONSTANTS = {f"constant {number}": float(number) for number in range(40)}


def shot(number: int, **changes: Any) -> dict[str, Any]:
    base = {
        "machine": "heron", "sequence": "hold",
        "started": f"2026-10-05T{10 + number // 180:02d}:{number // 3 % 60:02d}:{number % 3 * 20:02d}Z",
        "parameters": {**CONSTANTS, "hold": number * 7 % 10, "coil": 1.5},
    }  # fmt: skip
    return {**base, **changes}


def sizes(store: Store) -> tuple[int, int, float]:
    """Return the number of sets, of their values, and of moved values a shot."""
    with store._session.reading() as connection:
        sets, contents, moved, shots = (
            connection.execute(select(func.count()).select_from(table)).scalar_one()
            for table in (tables.value_set, tables.set_value, tables.shot_value, tables.shot)
        )
    return sets, contents, moved / shots


@pytest.mark.parametrize("swept", [["hold"], []])
def test_a_scan_makes_few_rows(store: Store, swept: list[str]) -> None:
    store.take([shot(n, swept=swept) for n in range(300)])
    sets, contents, moved = sizes(store)
    assert sets <= 2
    assert contents <= 2 * 42
    assert moved <= 1.05


def test_two_scans_taking_turns_share_nothing_but_cost_nothing(store: Store) -> None:
    store.take([shot(n, sequence=("one", "two")[n % 2], scan=("a", "b")[n % 2]) for n in range(300)])
    sets, _, moved = sizes(store)
    assert sets <= 4
    assert moved <= 1.05


def test_a_new_process_goes_on_with_the_stream(store_path: Path) -> None:
    for start in range(0, 100, 4):
        with open_store(store_path) as store:
            store.take([shot(n) for n in range(start, start + 4)])
    with open_store(store_path) as store:
        sets, _, moved = sizes(store)
    assert sets <= 3
    assert moved <= 1.1


def test_two_writers_on_one_stream(store_path: Path) -> None:
    with open_store(store_path) as one, open_store(store_path) as other:
        for number in range(70):
            (one, other)[number % 2].take([shot(number)])
        sets, _, moved = sizes(one)
    assert sets <= 3
    assert moved <= 1.1


def test_what_has_rested_for_twenty_shots_goes_back_into_the_set(store: Store) -> None:
    def edited(number: int) -> dict[str, Any]:
        return shot(number, parameters={**CONSTANTS, "coil": 1.5 if number < 50 else 1.6})

    store.take([edited(n) for n in range(50 + MEMORY)])
    with store._session.reading() as connection:
        moved = connection.execute(select(func.count()).select_from(tables.shot_value)).scalar_one()
    assert moved == MEMORY
    store.take([edited(n) for n in range(50 + MEMORY, 140)])
    with store._session.reading() as connection:
        assert connection.execute(select(func.count()).select_from(tables.shot_value)).scalar_one() == MEMORY
    assert sizes(store)[0] == 3


@pytest.mark.parametrize("value", [float("nan"), -0.0, 2**70, "é", [1, 2], True])
def test_untidy_values_that_rest_do_rest(store_path: Path, value: Any) -> None:
    for start in (0, 30):
        with open_store(store_path) as store:
            store.take([shot(n, parameters={**CONSTANTS, "odd": value}) for n in range(start, start + 30)])
            sets, _, moved = sizes(store)
            assert (sets, moved) == (1, 0)


def test_a_drifting_constant(store: Store) -> None:
    store.take(
        [shot(n, swept=["hold"], parameters={**shot(n)["parameters"], "drift": n // 50}) for n in range(500)]
    )
    sets, contents, moved = sizes(store)
    assert moved <= 2.0
    assert contents <= 25 * 43
    assert sets <= 25


def test_sets_are_shared_by_the_streams_of_a_machine_never_by_machines(store: Store) -> None:
    for machine in ("heron", "egret"):
        for sequence in ("one", "two"):
            store.take([shot(n, machine=machine, sequence=sequence, parameters=CONSTANTS) for n in range(5)])
    assert sizes(store)[0] == 2
