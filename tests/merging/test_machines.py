"""One machine under two names: merged, the store has what it would have had under one."""

from __future__ import annotations

import random
import sqlite3
from collections.abc import Callable
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import pytest
from sqlalchemy import func, select

from nightfold import tables
from nightfold.errors import MergeError
from nightfold.merging.machines import MergeReport
from nightfold.opening import create_store, open_store
from nightfold.store import Store

START = datetime(2026, 10, 5, 19, tzinfo=UTC)
WRONG, RIGHT = "Heron", "heron"
Record = dict[str, Any]


def evening(seed: int = 3) -> list[Record]:
    """Return an evening: labelled scans that are resumed, found scans, edits, references, steps, notes, failures."""
    rng = random.Random(seed)
    rests = {f"rest_{k}": float(k) for k in range(12)} | {"axis": "x", "shutter": True}
    steps = {
        "name": "hold",
        "steps": [{"name": "ramp", "duration": {"value": 40, "unit": "ms"}, "settings": {"end": 1.5}}],
    }
    records: list[Record] = []

    def add(**fields: Any) -> None:
        number = len(records)
        extra = fields.pop("parameters", {})
        records.append({
            "machine": RIGHT, "started": (START + timedelta(seconds=15 * number)).isoformat(), "sequence": "hold",
            "parameters": {**rests, "current": {"value": 60.0, "unit": "A"}, **extra},
            "observables": {
                "atoms": {"value": 1e5 * rng.random(), "stderr": 100.0},
                "width": {"value": 20 + rng.random(), "unit": "um"},
            },
            **fields,
        })  # fmt: skip

    for part in range(6):
        for k in range(12):
            add(scan="loss", swept=["current"], parameters={"current": {"value": 61 + 0.1 * k, "unit": "A"}})
            if k % 5 == 4:
                add(reference=True)
        rests["rest_3"] = 3.0 + part
        for k in range(11):
            add(parameters={"time": {"value": 2.0 * k, "unit": "ms"}}, note="dim" if k == 7 else "")
        for k in range(9):
            moved = {"field": 0.5 * k, "follows": 2.0 * k}
            failed = "no atoms" if k == 2 else None
            add(sequence=steps, uid=f"steps-{part}-{k}", swept=["field"], parameters=moved, failed=failed)
        for k in range(6):
            add(scan=f"map-{part // 3}", swept=["current"], parameters={"current": 60.5 + k}, last=k == 5)
    return records


def under(name: str, records: list[Record]) -> list[Record]:
    return [{**record, "machine": name} for record in records]


def content(store: Store) -> dict[str, Any]:
    """Return all that a store says, without ids and uids: by the time at which shots started."""
    shots = store.shots(set_aside=True)
    when = dict(zip(shots["uid"], shots["started"], strict=True))
    scan_of: dict[Any, Any] = {}
    scans = []
    for scan in store.scans():
        table = scan.table(set_aside=True)
        members = tuple(table["started"])
        name = scan.label and scan.key
        scan_of |= dict.fromkeys(members, (name, members[0]))
        scans.append((
            name, scan.machine, scan.sequence, scan.origin, scan.shots, scan.set_aside, scan.complete, members,
            tuple((axis.parameter, axis.unit, axis.points, axis.low, axis.high) for axis in scan.axes),
            tuple(sorted(scan.followers.items())), scan.observables,
            repr(table.drop(columns=["uid", "shot_id"]).to_dict("records")),
        ))  # fmt: skip
    views = {}
    for uid, at in when.items():
        view = store.shot(uid)
        views[at] = (
            view.machine, view.sequence, view.reference, view.parameters, view.observables, view.set_aside,
            view.notes, scan_of.get(at),
        )  # fmt: skip
    edits = store.edits().drop(columns=[]).to_dict("records")
    nights = store.nights().to_dict("records")
    names = store.parameters().to_dict("records"), store.observables().to_dict("records")
    return {
        "shots": views,
        "scans": sorted(scans, key=lambda scan: scan[7]),
        "edits": edits,
        "nights": nights,
        "names": names,
    }


def sizes(store: Store) -> dict[str, int]:
    with store._session.reading() as connection:
        return {
            table.name: connection.execute(select(func.count()).select_from(table)).scalar_one()
            for table in tables.metadata.sorted_tables
        }


def digests(store: Store) -> list[tuple[int, bytes, bytes]]:
    """Return time, settings and resting settings of every shot, as digests."""
    with store._session.reading() as connection:
        shot, whole = tables.shot, tables.value_set
        query = (
            select(shot.c.started_us, shot.c.values_digest, whole.c.digest)
            .join(whole)
            .order_by(shot.c.started_us)
        )
        return [(row[0], bytes(row[1]), bytes(row[2])) for row in connection.execute(query)]


@pytest.fixture
def reference(tmp_path: Path) -> Callable[[list[Record]], Store]:
    """Return a function that makes a store which took all records under the right name."""

    def take(records: list[Record]) -> Store:
        store = create_store(tmp_path / "right.sqlite")
        store.take(records)
        return store

    return take


@pytest.mark.parametrize("cut", [17, 100, 180])
def test_half_an_evening_under_another_name(
    anywhere: str, reference: Callable[[list[Record]], Store], cut: int
) -> None:
    records = evening()
    wanted = reference(records)
    with open_store(anywhere) as store:
        store.take(under(WRONG, records[:cut]))
        store.take(records[cut:])
        report = store.merge_machines(WRONG, RIGHT, reason="control program set up wrongly", by="ida")
        assert (report.shots, report.doubles, report.dry_run) == (cut, 0, False)
        assert store.machines() == [RIGHT]
        assert content(store) == content(wanted)
        ours, theirs = sizes(store), sizes(wanted)
        assert ours.pop("machine_alias") == 1
        slack = {"value_set": 8, "set_value": 8 * 20, "shot_value": 60}
        for name, count in theirs.items():
            if name not in ("turn", "machine_alias"):
                assert abs(ours[name] - count) <= slack.get(name, 0), name
        for ours_, theirs_ in zip(digests(store), digests(wanted), strict=True):
            assert ours_[:2] == theirs_[:2]
        assert sum(
            one == other for one, other in zip(digests(store), digests(wanted), strict=True)
        ) > 0.7 * len(records)
    wanted.close()


def test_piece_by_piece_in_any_order(anywhere: str, reference: Callable[[list[Record]], Store]) -> None:
    """The names change within scans, so that each of them is put together of both; and shots come late."""
    records = evening()
    wanted = reference(records)
    pieces = [records[start : start + 14] for start in range(0, len(records), 14)]
    named = [under(WRONG, piece) if place % 2 else piece for place, piece in enumerate(pieces)]
    random.Random(5).shuffle(named)
    with open_store(anywhere) as store:
        for piece in named:
            store.take(piece)
        store.merge_machines(WRONG, RIGHT, reason="wrong name")
        assert content(store) == content(wanted)
    wanted.close()


def test_what_was_taken_is_known_and_what_comes_goes_to_the_machine(anywhere: str) -> None:
    records = evening()
    with open_store(anywhere) as store, open_store(anywhere) as open_already:
        open_already.take(under(WRONG, records[:100]))
        store.take(records[100:200])
        store.merge_machines(WRONG, RIGHT, reason="wrong name")
        for writer in (open_already, store):
            again = writer.take(under(WRONG, records[:100]))
            assert (again.new, again.known, again.amended, again.refused) == (0, 100, 0, [])
            mended = writer.take(records[:100])  # the files were put right meanwhile
            assert (mended.new, mended.known, mended.refused) == (0, 100, [])
        assert store.take(under(WRONG, records[100:200])).known == 100
        assert open_already.take(under(WRONG, records[200:])).new == len(records) - 200
        assert store.machines() == [RIGHT]
        assert (
            len(store.shots(machine=WRONG, set_aside=True))
            == len(store.shots(machine=RIGHT, set_aside=True))
            == len(records)
        )
        assert store.shots(["current"], machine=WRONG)["current"].notna().all()
        assert (store.machine(WRONG), store.zone(WRONG)) == (RIGHT, "UTC")
        late = {"format": 1, "uid": "steps-0-1", "observables": {"atoms": 7.0}}
        assert store.take([late]).amended == 1


def test_the_file_as_it_was(tmp_path: Path) -> None:
    path = tmp_path / "a.sqlite"
    with create_store(path) as store:
        store.take(under(WRONG, evening()[:20]))
        store.take(evening()[20:40])
        report = store.merge_machines(WRONG, RIGHT, reason="wrong name")
        assert report.copy == tmp_path / "a.sqlite.before-merge"
        with open_store(report.copy) as copy:
            assert copy.machines() == [WRONG, RIGHT]
        store.take([{**evening()[0], "machine": "egret"}])
        from nightfold.errors import StoreError

        with pytest.raises(StoreError, match="before-merge exists already; move it away first"):
            store.merge_machines("egret", RIGHT, reason="wrong name")
        assert store.machines() == ["egret", RIGHT]


def test_a_trial_changes_nothing(anywhere: str) -> None:
    records = evening()
    with open_store(anywhere) as store:
        store.take(under(WRONG, records[:90]))
        store.take(records[90:])
        before = content(store), sizes(store)
        report = store.merge_machines(WRONG, RIGHT, reason="wrong name", dry_run=True)
        assert isinstance(report, MergeReport)
        assert (report.shots, report.shared_sequences, report.copy, report.dry_run) == (90, 1, None, True)
        assert (content(store), sizes(store)) == before
        real = store.merge_machines(WRONG, RIGHT, reason="wrong name")
        assert (real.shots, real.names, real.shared_names, real.scans) == (
            report.shots, report.names, report.shared_names, report.scans,
        )  # fmt: skip


def simple(number: int, machine: str = RIGHT, **fields: Any) -> Record:
    started = (START + timedelta(seconds=20 * number)).isoformat()
    return {"machine": machine, "sequence": "s", "started": started, "parameters": {"a": number}, **fields}


def test_one_after_the_other(anywhere: str) -> None:
    with open_store(anywhere) as store:
        store.take([simple(0, "a"), simple(1, "b"), simple(2, "c")])
        store.merge_machines("a", "b", reason="x")
        if store._session.place.path:
            store._session.place.path.with_name(store._session.place.path.name + ".before-merge").unlink()
        store.merge_machines("b", "c", reason="x")
        assert store.machines() == ["c"]
        again = store.take([simple(0, "a"), simple(1, "b"), simple(2, "c"), simple(0, "b"), simple(3, "a")])
        assert (again.new, again.known) == (1, 4)


def test_units_known_on_one_side_only(anywhere: str, tmp_path: Path) -> None:
    (tmp_path / "heron.toml").write_text('machine = "heron"\n[parameters.c]\nunit = "G"\n')
    with open_store(anywhere) as store:
        store.take([
            simple(0, WRONG, parameters={"a": 1, "b": {"value": 2, "unit": "A"}, "c": 3},
                   observables={"n[up]": 1, "w": {"value": 1, "unit": "um"}}),
            simple(1, parameters={"a": {"value": 1, "unit": "ms"}, "b": 2},
                   observables={"n[down]": {"value": 1, "unit": "atoms"}, "w": 2}),
        ])  # fmt: skip
        store.use_card(tmp_path / "heron.toml")
        store.merge_machines(WRONG, RIGHT, reason="x")
        known = {row["name"]: row["unit"] for row in store.parameters().to_dict("records")}
        assert known == {"a": "ms", "b": "A", "c": "G"}
        read = {row["name"]: row["unit"] for row in store.observables().to_dict("records")}
        assert read == {"n[up]": "atoms", "n[down]": "atoms", "w": "um"}


def test_the_same_shots_under_both_names(anywhere: str) -> None:
    """Somebody put the file right and took it again: each shot counts once, the other is set aside, none is gone."""
    with open_store(anywhere) as store:
        store.take([simple(k, WRONG, scan="x") for k in range(6)])
        store.take([simple(k, scan="x") for k in range(3, 9)])
        report = store.merge_machines(WRONG, RIGHT, reason="x")
        assert report.doubles == 3
        assert len(store.shots()) == 9
        every = store.shots(set_aside=True)
        assert len(every) == 12
        aside = sorted(set(every["uid"]) - set(store.shots()["uid"]))
        assert all("the same shot as" in (store.shot(uid).set_aside or "") for uid in aside)
        assert [(scan.key, scan.shots, scan.set_aside) for scan in store.scans()] == [("x#1", 9, 3)]
        assert (
            store.take([simple(k, name, scan="x") for k in range(9) for name in (WRONG, RIGHT)]).known == 18
        )


def test_notes_go_along(anywhere: str) -> None:
    with open_store(anywhere) as store:
        store.take([simple(k, WRONG, scan="x") for k in range(3)])
        store.take([simple(k, scan="x") for k in range(3, 9)])
        store.take([simple(0, f"{WRONG} two")])
        store.add_note("night", night="2026-10-05", machine=WRONG)
        store.add_note("not ours", night="2026-10-05", machine=f"{WRONG} two")
        store.add_note("scan", scan=store.scans()[0].id)
        store.add_note("shot", shot=store.shots(machine=WRONG)["uid"][0])
        store.merge_machines(WRONG, RIGHT, reason="x")
        assert store.notes(night="2026-10-05", machine=RIGHT)["text"].tolist() == ["night"]
        assert store.notes(night="2026-10-05", machine=f"{WRONG} two")["text"].tolist() == ["not ours"]
        assert store.notes(scan="x")["text"].tolist() == ["scan"]
        assert sorted(store.notes(machine=WRONG)["text"]) == ["night", "scan", "shot"]


def test_fits_stay_and_are_stale_where_scans_grew(anywhere: str) -> None:
    with open_store(anywhere) as store:
        for name, first, label in ((WRONG, 0, "x"), (WRONG, 100, "alone"), (RIGHT, 10, "x")):
            dip = [3.0 + (k - 4) ** 2 for k in range(10)]
            store.take(
                simple(first + k, name, scan=label, swept=["a"], observables={"n": n})
                for k, n in enumerate(dip)
            )
        for scan in store.scans():
            store.fit(scan.id, "gaussian", observable="n")
        store.merge_machines(WRONG, RIGHT, reason="x")
        assert sorted({(fit.scan_key, fit.stale) for fit in store.fits()}) == [
            ("alone#1", False),
            ("x#1", True),
        ]


def test_what_was_joined_by_hand_stays_joined(anywhere: str) -> None:
    with open_store(anywhere) as store:
        for first, name, label in ((0, WRONG, "x"), (10, WRONG, "y"), (20, RIGHT, "x"), (30, RIGHT, "y")):
            store.take([simple(first + k, name, scan=label, swept=["a"]) for k in range(6)])
        ids = [scan.id for scan in store.scans() if scan.machine == WRONG]
        store.join_scans(ids, reason="a typing error")
        store.merge_machines(WRONG, RIGHT, reason="x")
        joined = next(scan for scan in store.scans() if scan.id == ids[0])
        assert set(joined.table()["a"]) >= {0, 5, 10, 15}
        assert sum(scan.shots for scan in store.scans()) == 24
        (number,) = store.arrangements()["number"]
        store.undo_arrangement(int(number))
        assert sorted((scan.key, scan.shots) for scan in store.scans()) == [("x#1", 12), ("y#1", 12)]


def test_derived_quantities_are_those_of_the_machine(anywhere: str, tmp_path: Path) -> None:
    def card(machine: str, expression: str, extra: str = "") -> Path:
        path = tmp_path / f"{machine}.toml"
        path.write_text(
            f'machine = "{machine}"\n[parameters.f]\nunit = "MHz"\n{extra}'
            f'[derived.detuning]\nexpression = "{expression}"\n'
        )
        return path

    def shots(machine: str, first: int) -> list[Record]:
        return [
            simple(first + k, machine, scan="x", swept=["detuning"], parameters={"f": 80.0 + first + k})
            for k in range(6)
        ]

    with open_store(anywhere) as store:
        store.use_card(card(WRONG, "3*f"))
        store.use_card(card(RIGHT, "2*f - 160 MHz"))
        store.take([*shots(WRONG, 0), *shots(RIGHT, 6)])
        store.merge_machines(WRONG, RIGHT, reason="x")
        assert store.shots(["detuning"])["detuning"].tolist() == [2.0 * k for k in range(12)]
        (scan,) = store.scans()
        assert (scan.key, scan.axes[0].points) == ("x#1", 12)
        assert store.parameters()["name"].tolist() == ["detuning", "f"]
        store.use_card(card("egret", "f", '[parameters.x]\nunit = "A"\n'))
        store.take([simple(0, "egret", parameters={"detuning2": 5})])
        (tmp_path / "heron.toml").write_text(
            'machine = "heron"\n[parameters.f]\nunit = "MHz"\n[derived.detuning]\nexpression = "2*f - 160 MHz"\n'
            '[derived.detuning2]\nexpression = "f"\n'
        )
        store.use_card(tmp_path / "heron.toml")
        with pytest.raises(MergeError, match="detuning2"):
            store.merge_machines("egret", RIGHT, reason="x")


def test_corrections_hold(anywhere: str) -> None:
    records = [simple(k, WRONG if k < 6 else RIGHT, scan="x", swept=["a"]) for k in range(12)]
    with open_store(anywhere) as store:
        store.take(records)
        uid = store.shots(machine=WRONG)["uid"][2]
        store.correct([uid], {"a": 2.5}, "misread")
        store.merge_machines(WRONG, RIGHT, reason="x")
        assert store.shots(["a"])["a"].tolist() == [0, 1, 2.5, *range(3, 12)]
        assert store.scan("x").axes[0].points == 12
        assert store.take(records).known == 12


def readings(machine: str, numbers: range, offset: float = 0) -> list[Record]:
    return [
        {"machine": machine, "at": (START + timedelta(minutes=7 * k)).isoformat(),
         "readings": {"room": k + offset, f"only {machine}": 2.0 * k}}
        for k in numbers
    ]  # fmt: skip


def test_sensors_are_merged_reading_by_reading(anywhere: str) -> None:
    with open_store(anywhere) as store:
        store.take([simple(0, WRONG), simple(1)])
        store.take_sensors(readings(WRONG, range(40)))
        store.take_sensors(readings(RIGHT, range(30, 60)))
        store.merge_machines(WRONG, RIGHT, reason="x")
        listed = store.sensors()
        assert listed["name"].tolist() == ["only Heron", "only heron", "room"]
        assert listed["readings"].tolist() == [40, 30, 60]
        assert store.sensor("room")["value"].tolist() == [float(k) for k in range(60)]
        assert store.sensor("only Heron", machine=WRONG)["value"].tolist() == [2.0 * k for k in range(40)]
        again = store.take_sensors([*readings(WRONG, range(40)), *readings(RIGHT, range(30, 60))])
        assert (again.new, again.refused) == (0, [])
        assert again.known == 140
        assert store.take_sensors(readings(WRONG, range(60, 61))).new == 2


def test_when_it_fails_halfway_nothing_is_changed(anywhere: str, monkeypatch: pytest.MonkeyPatch) -> None:
    from nightfold.merging import machines

    def fail(*_: object) -> None:
        raise RuntimeError("pulled plug")

    with open_store(anywhere) as store:
        store.take(under(WRONG, evening()[:50]))
        store.take(evening()[50:])
        before = content(store), sizes(store)
        monkeypatch.setattr(machines, "fold_again", fail)
        with pytest.raises(RuntimeError, match="pulled plug"):
            store.merge_machines(WRONG, RIGHT, reason="x")
        assert (content(store), sizes(store)) == before
        monkeypatch.undo()
        store.merge_machines(WRONG, RIGHT, reason="x")


def test_references_hold_in_the_file(tmp_path: Path) -> None:
    path = tmp_path / "a.sqlite"
    with create_store(path) as store:
        store.take(under(WRONG, evening()[:150]))
        store.take(evening()[150:])
        store.merge_machines(WRONG, RIGHT, reason="x")
    connection = sqlite3.connect(path)
    assert connection.execute("PRAGMA foreign_key_check").fetchall() == []
    assert connection.execute("PRAGMA integrity_check").fetchall() == [("ok",)]
    connection.close()
