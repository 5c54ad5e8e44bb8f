"""Correcting settings of stored shots: by a correction that is appended, never by forgetting what stood there.

Value sets are shared and never change. A setting that rests in a set becomes a row of the shot, which then points to
the set without that setting; one that moves has its row changed. The digest of the settings is brought along, and the
digest before is kept with the correction, so that the record as it was first taken is known for ever.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from sqlalchemy import Connection, Row, bindparam, func, insert, literal, select, update

from nightfold import tables
from nightfold.errors import NotFound, RecordError, RequestError
from nightfold.ledger.checking import CheckedShot
from nightfold.ledger.names import MachineNames, Names
from nightfold.ledger.rows import chunks, insert_many, next_id
from nightfold.ledger.selecting import is_double, near_miss
from nightfold.ledger.setting_aside import clean_reason
from nightfold.ledger.shifting import Shift, read_shift, settle_shift
from nightfold.records import clean_name, shorten
from nightfold.settings import Value, digest_of_sum, hash_setting, setting_value
from nightfold.timestamps import now_us


@dataclass(frozen=True, slots=True)
class _Wanted:
    """What a parameter of a machine is to be."""

    parameter_id: int
    name: str
    value: Value | Shift
    unit: str


@dataclass(frozen=True, slots=True)
class Change:
    """One setting of one shot, before and after."""

    parameter_id: int
    name: str
    old: Value
    new: Value
    moving: bool
    unit: str

    @property
    def shift(self) -> int:
        """By how much the sum of the shot's setting hashes changes."""
        return hash_setting(self.name, self.new.token) - hash_setting(self.name, self.old.token)


@dataclass(frozen=True, slots=True)
class SettingChange:
    """What a correction made of one setting of one shot.

    Attributes
    ----------
    uid, parameter : str
    old, new : float, int, str or bool
    unit : str
    """

    uid: str
    parameter: str
    old: float | int | str | bool
    new: float | int | str | bool
    unit: str


class Corrected(int):
    """How many shots a correction changed, a whole number that knows more.

    Attributes
    ----------
    number : int or None
        Of the correction, to undo it by; None if it was only tried.
    changes : tuple of SettingChange
        In the order of the shots.
    """

    number: int | None = None
    changes: tuple[SettingChange, ...] = ()

    @classmethod
    def of(
        cls, shots: Sequence[Row[Any]], changes: Mapping[int, Sequence[Change]], number: int | None
    ) -> Corrected:
        """Return what was done to these shots."""
        done = cls(len(shots))
        done.number = number
        done.changes = tuple(
            SettingChange(shot.uid, change.name, change.old.plain, change.new.plain, change.unit)
            for shot in shots
            for change in changes[shot.id]
        )
        return done


def correct_shots(
    connection: Connection,
    shots: Sequence[Row[Any]],
    stated: Mapping[Any, Any],
    reason: str,
    by: str | None,
) -> tuple[Corrected, list[Row[Any]]]:
    """Correct settings of shots; return what was done, and the shots that were changed, as they were before.

    Parameters
    ----------
    shots : sequence of rows of the shot table
    stated : mapping of parameter to value
        As in a record: a number, text, truth, or an object with value and unit; or a shift, as `read_shift` takes it.
    reason : str
        Why; needed.
    by : str, optional
        Who says so.

    Raises
    ------
    NotFound
        If a machine has no such parameter.
    RecordError
        If a value cannot be taken for its parameter, a shot has no such setting, or nothing would change.
    RequestError
        If no setting or no reason is given.
    """
    reason = clean_reason("correct", reason)
    if not stated:
        raise RequestError("correct: found no setting, wanted at least one, as in {'coil_current': 61.3}")
    shots = list({shot.id: shot for shot in shots}.values())
    wanted = _wanted_by_sequence(connection, shots, stated)
    held = held_values(connection, shots, {item.parameter_id for own in wanted.values() for item in own})
    changes: dict[int, list[Change]] = {}
    for shot in shots:
        own = [
            _compare(shot, item, held.get((shot.id, item.parameter_id))) for item in wanted[shot.sequence_id]
        ]
        if changed := [change for change in own if change.old.token != change.new.token]:
            changes[shot.id] = changed
    if shots and not changes:
        item = wanted[shots[0].sequence_id][0]
        raise RecordError(
            f"shot {shots[0].uid}: parameters.{item.name}",
            _said(item),
            "another value: it has this one already",
        )
    changed_shots = [shot for shot in shots if shot.id in changes]
    number = write_changes(connection, changed_shots, changes, reason, by)
    return Corrected.of(changed_shots, changes, number), changed_shots


def _wanted_by_sequence(
    connection: Connection, shots: Iterable[Row[Any]], stated: Mapping[Any, Any]
) -> dict[int, list[_Wanted]]:
    """Return what is wanted of the shots of each sequence, in the units of its machine."""
    names = Names()
    names.load(connection)
    machine_of = {key: machine for machine in names.machines.values() for key in machine.sequences.values()}
    settled: dict[int, list[_Wanted]] = {}
    found: dict[int, list[_Wanted]] = {}
    for shot in shots:
        if shot.sequence_id not in found:
            machine = machine_of[shot.sequence_id]
            if machine.id not in settled:
                settled[machine.id] = [
                    _settle(connection, names, machine, shot.uid, key, raw) for key, raw in stated.items()
                ]
            found[shot.sequence_id] = settled[machine.id]
    for own in settled.values():
        if len({item.name for item in own}) < len(own):
            raise RecordError("parameters", "the same name twice", "each parameter once")
    return found


def _settle(
    connection: Connection, names: Names, machine: MachineNames, uid: str, key: Any, raw: Any
) -> _Wanted:
    """Return one setting as it would be taken; a unit that is the first one stated for its parameter is adopted."""
    try:
        name = clean_name(key)
    except ValueError as problem:
        raise RecordError(f"shot {uid}: parameters", f"the name {shorten(key)}", str(problem)) from None
    if name in machine.observables:
        raise NotFound(
            f"parameter {name!r}: it is an observable of {machine.name}; a reading is changed by another record of the "
            f"shot, as in {{'uid': '{uid}', 'observables': {{'{name}': …}}, 'derivation': …}}"
        )
    if name not in machine.parameters:
        known = near_miss(name, machine.parameters)
        raise NotFound(f"parameter {name!r}: {machine.name} has none of that name; {known}")
    field = f"shot {uid}: parameters.{name}"
    value: Value | Shift
    if shift := read_shift(raw, field):
        value, known_now = settle_shift(machine, name, *shift, field)
    else:
        settled = setting_value(raw, field)
        if settled is None:
            raise RecordError(field, "null", "a value: what was set can be corrected, not taken away")
        value, known_now = machine.settle(name, *settled, field)
        if value.kind == "number" and value.exact in ("nan", "inf", "-inf"):
            raise RecordError(field, value.exact, "a finite number: what was really set")
    if known_now is not machine.parameters[name]:
        names.keep(connection, machine, {name: known_now})
    return _Wanted(machine.parameters[name].id or 0, name, value, known_now.unit or "")


def held_values(
    connection: Connection, shots: Sequence[Row[Any]], parameter_ids: set[int]
) -> dict[tuple[int, int], tuple[Value, bool]]:
    """Return the settings that shots have, by shot and parameter, and whether they move (or rest in a set)."""
    parameter, move, rest = tables.parameter, tables.shot_value, tables.set_value
    query = select(parameter.c.id, parameter.c.kind).where(parameter.c.id.in_(parameter_ids))
    kinds = {row.id: row.kind for row in connection.execute(query)}
    resting: dict[int, list[tuple[int, Value]]] = {}
    for part in chunks(sorted({shot.set_id for shot in shots})):
        own = rest.c.set_id.in_(part) & rest.c.parameter_id.in_(parameter_ids)
        for row in connection.execute(select(rest).where(own)):
            value = Value(kinds[row.parameter_id], row.num, row.exact)
            resting.setdefault(row.set_id, []).append((row.parameter_id, value))
    found = {
        (shot.id, parameter_id): (value, False)
        for shot in shots
        for parameter_id, value in resting.get(shot.set_id, ())
    }
    for part in chunks([shot.id for shot in shots]):
        own = move.c.shot_id.in_(part) & move.c.parameter_id.in_(parameter_ids)
        for row in connection.execute(select(move).where(own)):
            value = Value(kinds[row.parameter_id], row.num, row.exact)
            found[row.shot_id, row.parameter_id] = (value, True)
    return found


def _compare(shot: Row[Any], item: _Wanted, held: tuple[Value, bool] | None) -> Change:
    field = f"shot {shot.uid}: parameters.{item.name}"
    if held is None:
        raise RecordError(
            field,
            f"{_said(item)} for a setting that it does not have",
            "one that it has: a correction changes a setting, it adds none",
        )
    old, moving = held
    new = item.value.of(old, field) if isinstance(item.value, Shift) else item.value
    return Change(item.parameter_id, item.name, old, new, moving, item.unit)


def _said(item: _Wanted) -> str:
    if isinstance(item.value, Shift):
        return f"{item.value} {item.unit if item.value.sign == '+=' else ''}".rstrip()
    shown = shorten(item.value.plain)
    return f"{shown} {item.unit}".rstrip()


def write_changes(
    connection: Connection,
    shots: Sequence[Row[Any]],
    changes: Mapping[int, Sequence[Change]],
    reason: str,
    by: str | None,
) -> int | None:
    """Enter corrections, and what the shots point to from now on; return the number of the correction."""
    why = {"reason": reason, "by": by, "at_us": _own_moment(connection)}
    corrections, pointers, fresh, moved = [], [], [], []
    sets: dict[tuple[int, frozenset[int]], int] = {}
    for shot in shots:
        total = int.from_bytes(shot.values_digest, "little")
        for change in changes[shot.id]:
            corrections.append({
                "shot_id": shot.id, "parameter_id": change.parameter_id,
                "old_num": change.old.num, "old_exact": change.old.exact,
                "new_num": change.new.num, "new_exact": change.new.exact,
                "old_digest": digest_of_sum(total), **why,
            })  # fmt: skip
            total += change.shift
            if change.moving:
                moved.append({
                    "of_shot": shot.id, "of_parameter": change.parameter_id,
                    "num": change.new.num, "exact": change.new.exact,
                })  # fmt: skip
            else:
                fresh.append((shot.id, change.parameter_id, change.new.num, change.new.exact, False))
        rested = [change for change in changes[shot.id] if not change.moving]
        key = shot.set_id, frozenset(change.parameter_id for change in rested)
        if key not in sets:
            sets[key] = _set_without(connection, shot.set_id, rested) if rested else shot.set_id
        pointers.append({"of_shot": shot.id, "set_id": sets[key], "values_digest": digest_of_sum(total)})
    if not shots:
        return None
    shot_table, value = tables.shot, tables.shot_value
    connection.execute(insert(tables.correction), corrections)
    connection.execute(update(shot_table).where(shot_table.c.id == bindparam("of_shot")), pointers)
    insert_many(connection, value, fresh)
    if moved:
        same = (value.c.shot_id == bindparam("of_shot")) & (value.c.parameter_id == bindparam("of_parameter"))
        connection.execute(update(value).where(same), moved)
    table = tables.correction
    first = select(func.min(table.c.id)).where(table.c.at_us == why["at_us"])
    return int(connection.execute(first).scalar_one())


def _own_moment(connection: Connection) -> int:
    """Return the time now, or one soon after it that no correction has: those of one time are one correction."""
    at_us, table = now_us(), tables.correction
    while connection.execute(select(table.c.id).where(table.c.at_us == at_us).limit(1)).first() is not None:
        at_us += 1
    return at_us


def _set_without(connection: Connection, set_id: int, leaving: Sequence[Change]) -> int:
    """Return the id of the set that has all of another but some settings, found by its digest or made."""
    whole, content = tables.value_set, tables.set_value
    old = connection.execute(select(whole).where(whole.c.id == set_id)).one()
    gone = sum(hash_setting(change.name, change.old.token) for change in leaving)
    digest = digest_of_sum(int.from_bytes(old.digest, "little") - gone)
    found = connection.execute(select(whole.c.id).where(whole.c.digest == digest)).scalar()
    if found is not None:
        return int(found)
    new_id = next_id(connection, whole)
    connection.execute(insert(whole).values(id=new_id, digest=digest, n=old.n - len(leaving)))
    rest = select(literal(new_id), content.c.parameter_id, content.c.num, content.c.exact).where(
        content.c.set_id == set_id, content.c.parameter_id.notin_([change.parameter_id for change in leaving])
    )
    columns = ["set_id", "parameter_id", "num", "exact"]
    connection.execute(insert(content).from_select(columns, rest))
    return new_id


def digests_before(connection: Connection, shot_id: int) -> set[bytes]:
    """Return the digests that the settings of a shot had before its corrections."""
    table = tables.correction
    rows = connection.execute(select(table.c.old_digest).where(table.c.shot_id == shot_id)).scalars()
    return {bytes(digest) for digest in rows}


def find_corrected(connection: Connection, shots: Sequence[CheckedShot]) -> dict[str, Row[Any]]:
    """Return the stored shots that records without a uid are of, by the uid that would be made for the record.

    Such a uid is made of the machine's name and the settings: where these were corrected, and the record says them as
    they are now, or the machine was merged into another, and the record says the other name, only the time, the
    sequence and the settings tell that it is the same shot.
    """
    shot, table = tables.shot, tables.correction
    if not shots:
        return {}
    renamed = {item.machine.sequences.get(item.sequence) for item in shots if item.machine.merged} - {None}
    if not renamed and connection.execute(select(table.c.id).limit(1)).first() is None:
        return {}
    wanted = {
        (item.machine.sequences.get(item.sequence), item.started_us, item.values_digest): item.uid
        for item in shots
    }
    doubtful = shot.c.id.in_(select(table.c.shot_id)) | shot.c.sequence_id.in_(renamed)
    query = select(shot, is_double(shot.c.id).label("double")).where(doubtful)
    found: dict[str, Row[Any]] = {}
    for part in chunks(sorted({item.started_us for item in shots})):
        for row in connection.execute(query.where(shot.c.started_us.in_(part))):
            for digest in (bytes(row.values_digest), *digests_before(connection, row.id)):
                if uid := wanted.get((row.sequence_id, row.started_us, digest)):
                    found[uid] = row
    return found
