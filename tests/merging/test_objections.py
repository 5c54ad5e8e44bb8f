"""What speaks against merging two machines is said whole, and nothing is changed then."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import pytest
from sqlalchemy import func, select

from nightfold import tables
from nightfold.errors import CardError, MergeError, NotFound
from nightfold.opening import open_store
from nightfold.store import Store

START = datetime(2026, 10, 5, 19, tzinfo=UTC)
WRONG, RIGHT = "Heron", "heron"
Record = dict[str, Any]


def simple(number: int, machine: str = RIGHT, **fields: Any) -> Record:
    started = (START + timedelta(seconds=20 * number)).isoformat()
    return {"machine": machine, "sequence": "s", "started": started, "parameters": {"a": number}, **fields}


def readings(machine: str, numbers: range, offset: float = 0) -> list[Record]:
    return [
        {"machine": machine, "at": (START + timedelta(minutes=7 * k)).isoformat(),
         "readings": {"room": k + offset, f"only {machine}": 2.0 * k}}
        for k in numbers
    ]  # fmt: skip


def sizes(store: Store) -> dict[str, int]:
    with store._session.reading() as connection:
        return {
            table.name: connection.execute(select(func.count()).select_from(table)).scalar_one()
            for table in tables.metadata.sorted_tables
        }


def test_all_that_speaks_against_it_is_said(anywhere: str) -> None:
    with open_store(anywhere) as store:
        store.take([
            simple(0, WRONG, parameters={"current": {"value": 1, "unit": "A"}, "axis": "x", "t": 1, "both": 1},
                   observables={"n": {"value": 1, "unit": "um"}, "up[a]": {"value": 1, "unit": "m"}}),
            simple(1, parameters={"current": {"value": 1, "unit": "mA"}, "axis": 7},
                   observables={"n": {"value": 1, "unit": "mm"}, "t": 3, "both": 4,
                                "up[b]": {"value": 1, "unit": "s"}}),
        ])  # fmt: skip
        before = sizes(store)
        with pytest.raises(MergeError) as caught:
            store.merge_machines(WRONG, RIGHT, reason="wrong name")
        assert list(caught.value.reasons) == [
            "parameters.axis: found a text at Heron, wanted a number as at heron",
            "parameters.current: found 'A' at Heron, wanted 'mA' as at heron",
            "parameters.both: found a parameter of Heron, wanted another name: heron has an observable of that name",
            "parameters.t: found a parameter of Heron, wanted another name: heron has an observable of that name",
            "observables.n: found 'um' at Heron, wanted 'mm' as at heron",
            "observables.up: clouds of Heron are in 'm', those of heron in 's'",
        ]
        assert {**sizes(store), "turn": 1} == {**before, "turn": 1}
        assert store.machines() == [WRONG, RIGHT]


def test_who_and_why(store: Store) -> None:
    store.take([simple(0, WRONG), simple(1)])
    with pytest.raises(ValueError, match="found no reason"):
        store.merge_machines(WRONG, RIGHT, reason=" ")
    with pytest.raises(NotFound, match="machine 'egret'"):
        store.merge_machines("egret", RIGHT, reason="x")
    with pytest.raises(MergeError, match="these are the same machine"):
        store.merge_machines(RIGHT, RIGHT, reason="x")
    store.merge_machines(WRONG, RIGHT, reason="x", by="ida")
    with pytest.raises(MergeError, match="Heron is another name of heron already"):
        store.merge_machines(WRONG, RIGHT, reason="x")
    with store._session.reading() as connection:
        (row,) = connection.execute(select(tables.machine_alias)).all()
    assert (row.name, row.by, row.reason) == (WRONG, "ida", "x")


def test_cards_of_both(anywhere: str, tmp_path: Path) -> None:
    def card(machine: str, text: str = "") -> Path:
        path = tmp_path / f"{machine}.toml"
        path.write_text(f'machine = "{machine}"\n{text}')
        return path

    with open_store(anywhere) as store:
        store.take([simple(0, WRONG), simple(1)])
        store.use_card(card(WRONG, 'rejoin_within = "1 h"\n'))
        with pytest.raises(MergeError, match="Heron has one, wanted one of heron too"):
            store.merge_machines(WRONG, RIGHT, reason="x")
        store.use_card(card(RIGHT, 'rejoin_within = "2 h"\n'))
        store.use_card(card(WRONG, 'rejoin_within = "3 h"\n'))  # the newest of all
        store.merge_machines(WRONG, RIGHT, reason="x")
        assert store.cards()[RIGHT].rejoin_within_s == 7200
        used = store.cards_used(RIGHT)
        assert [one.toml.split('"')[3] for one in used] == ["1 h", "2 h", "3 h"]
        assert [one.in_force for one in used] == [False, True, False]
        with pytest.raises(CardError, match="wanted 'heron': the first is only another name"):
            store.use_card(card(WRONG))
        store.take([simple(k, WRONG, scan="x") for k in (400, 800)])  # 2 h and 13 min apart
        assert [scan.key for scan in store.scans() if scan.label] == ["x#1", "x#2"]


def test_naive_times_must_mean_the_same(anywhere: str, tmp_path: Path) -> None:
    def use(store: Store, machine: str, zone: str, naive: str) -> None:
        path = tmp_path / "card.toml"
        path.write_text(f'machine = "{machine}"\nzone = "{zone}"\nnaive_times = {naive}\n')
        store.use_card(path)

    naive = simple(0, WRONG, started="2026-10-05T21:00:00")
    with open_store(anywhere) as store:
        use(store, WRONG, "Europe/Vienna", "true")
        store.take([naive])
        for zone, opted in (("Europe/Vienna", "false"), ("UTC", "true")):
            use(store, RIGHT, zone, opted)
            with pytest.raises(
                MergeError, match="times without offset are local times of Europe/Vienna at Heron"
            ):
                store.merge_machines(WRONG, RIGHT, reason="x")
        use(store, RIGHT, "Europe/Vienna", "true")
        store.merge_machines(WRONG, RIGHT, reason="x")
        assert store.take([naive]).known == 1


def test_naive_times_of_an_earlier_card_count_too(anywhere: str, tmp_path: Path) -> None:
    def use(store: Store, machine: str, zone: str, naive: str) -> None:
        path = tmp_path / "card.toml"
        path.write_text(f'machine = "{machine}"\nzone = "{zone}"\nnaive_times = {naive}\n')
        store.use_card(path)

    with open_store(anywhere) as store:
        use(store, WRONG, "Europe/Vienna", "true")
        store.take([simple(0, WRONG, started="2026-10-05T21:00:00")])
        use(store, WRONG, "UTC", "false")
        use(store, RIGHT, "UTC", "true")
        with pytest.raises(
            MergeError, match="times without offset are local times of Europe/Vienna at Heron"
        ):
            store.merge_machines(WRONG, RIGHT, reason="x")
        use(store, RIGHT, "UTC", "false")
        store.merge_machines(WRONG, RIGHT, reason="x")


def test_sensors_that_contradict_each_other(anywhere: str) -> None:
    with open_store(anywhere) as store:
        store.take([simple(0, WRONG), simple(1)])
        store.take_sensors(readings(WRONG, range(10)))
        store.take_sensors(readings(RIGHT, range(7, 12), offset=0.5))
        with pytest.raises(
            MergeError, match=r"sensors\.room: found 3 readings that differ from those of heron"
        ):
            store.merge_machines(WRONG, RIGHT, reason="x")
