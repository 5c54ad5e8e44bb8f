"""From a parsed record to a checked shot: units settled, digests made, nothing written yet."""

from __future__ import annotations

import json
import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from nightfold.errors import RecordError, UnitError
from nightfold.ledger.names import Known, MachineNames
from nightfold.ledger.streams import Entry, Settled, StreamMemory
from nightfold.ledger.structure import DURATION
from nightfold.records import Derivation, Frame, SequenceSteps, ShotRecord, clean_name, shorten
from nightfold.settings import (
    ReadValue,
    digest_content,
    digest_of_sum,
    digest_text,
    hash_setting,
    reading_value,
    setting_value,
)
from nightfold.timestamps import parse_moment
from nightfold.units import conversion, parse_unit

_STDERR = "_stderr"


@dataclass(frozen=True, slots=True)
class ScanWish:
    """What a record says about the scan it belongs to."""

    label: str | None
    swept: tuple[str, ...]
    planned_shots: int | None
    last: bool


@dataclass(slots=True)
class CheckedShot:
    """A shot ready to be compared with the store and written; `named` tells whether its record gave the uid."""

    uid: str
    machine: MachineNames
    sequence: str
    structure: tuple[str, bytes] | None
    started_us: int
    wish: ScanWish
    reference: bool
    values_digest: bytes
    set_digest: bytes
    content_digest: bytes
    resting: dict[str, Entry] | None
    moving: dict[str, Entry]
    readings: dict[str, ReadValue]
    derivation: Derivation | None
    failed: str | None
    note: str
    frames: list[Frame]
    named: bool
    source_id: int | None = None
    line: int | None = None
    id: int = 0
    sequence_id: int = 0
    version_id: int | None = None
    scan_id: int | None = None


def sequence_name(record: ShotRecord) -> str:
    """Return the name of the record's sequence, in either form."""
    return record.sequence.name if isinstance(record.sequence, SequenceSteps) else record.sequence


def started_us_of(record: ShotRecord, machine: MachineNames) -> int:
    """Return when the shot started.

    Raises
    ------
    RecordError
        If the time cannot be read, carries no offset, or is ambiguous.
    """
    try:
        return parse_moment(record.started, machine.naive_zone)
    except ValueError as problem:
        raise RecordError("started", shorten(str(record.started)), str(problem)) from None


def settings_of(record: ShotRecord) -> tuple[Mapping[Any, Any], tuple[str, bytes] | None]:
    """Return all settings, those of the sequence's steps among them as ``step.setting``, and the structure.

    Raises
    ------
    RecordError
        If a step's setting has the name of a stated parameter, or its duration is no time.
    """
    if not isinstance(record.sequence, SequenceSteps):
        return record.parameters, None
    settings = dict(record.parameters)
    structure = []
    seen: dict[str, int] = {}
    for place, step in enumerate(record.sequence.steps):
        seen[step.name] = seen.get(step.name, 0) + 1
        name = step.name if seen[step.name] == 1 else f"{step.name}#{seen[step.name]}"
        stated = {} if step.duration is None else {DURATION: step.duration}
        stated |= step.settings
        if DURATION in stated:
            home = "settings." if DURATION in step.settings else ""
            _check_duration(stated[DURATION], f"sequence.steps.{place}.{home}{DURATION}")
        structure.append([name, list(stated)])
        for key, raw in stated.items():
            full = f"{name}.{key}"
            if full in settings:
                raise RecordError(
                    f"parameters.{full}", "a setting of a step of that name", "each parameter once"
                )
            settings[full] = raw
    text = json.dumps(structure, ensure_ascii=False, separators=(",", ":"))
    return settings, (text, digest_text(text))


def _check_duration(raw: Any, field: str) -> None:
    """Refuse a duration that is no finite time of at least 0; null is one that is not known.

    Raises
    ------
    RecordError
    """
    if type(raw) is float and 0 <= raw < math.inf:
        return
    stated = setting_value(raw, field)
    if stated is None:
        return
    value, unit = stated
    if value.kind != "number" or value.num is None or value.num < 0:
        raise RecordError(field, shorten(value.plain), "a time of at least 0, finite")
    if unit is None:
        return
    try:
        conversion(parse_unit(unit), "s")
    except UnitError as problem:
        raise RecordError(f"{field}.unit", shorten(unit), f"a unit of time ({problem})") from None


def readings_of(
    stated: Mapping[Any, Any], machine: MachineNames, plan: dict[str, Known]
) -> dict[str, ReadValue]:
    """Return the readings in the units stored; what would be known of their observables goes into `plan`.

    Raises
    ------
    RecordError
    """
    readings: dict[str, ReadValue] = {}
    for key, raw in _with_stderr(stated).items():
        name = key if key in machine.observables else _name_of(key)
        path = f"observables.{name}"
        if name in readings:
            raise RecordError(path, "the same name twice", "each observable once")
        if name in plan:
            raise RecordError(path, "an observable", f"another name: {name!r} is a parameter of this record")
        value, unit = reading_value(raw, path)
        readings[name], known = machine.settle_reading(name, value, unit, path, plan)
        if known.id is None or known is not machine.observables.get(name):
            plan[name] = known
    return readings


def _with_stderr(stated: Mapping[Any, Any]) -> Mapping[Any, Any]:
    """Return the observables with ``n_stderr`` beside a bare ``n`` made its standard uncertainty."""
    if not any(type(key) is str and key.endswith(_STDERR) for key in stated):
        return stated
    joined = dict(stated)
    for key in stated:
        base = key.removesuffix(_STDERR) if type(key) is str and key.endswith(_STDERR) else None
        if base in stated and not isinstance(stated[base], Mapping) and not isinstance(stated[key], Mapping):
            joined[base] = {"value": stated[base], "stderr": joined.pop(key)}
    return joined


def _name_of(key: Any) -> str:
    try:
        return clean_name(key)
    except ValueError as problem:
        raise RecordError("observables", f"the name {shorten(key)}", str(problem)) from None


def derivation_of(stated: str | Derivation | None) -> Derivation | None:
    """Return the derivation a record names, in its long form."""
    return Derivation(name=stated) if isinstance(stated, str) else stated


def check_shot(
    record: ShotRecord, machine: MachineNames, memory: StreamMemory
) -> tuple[CheckedShot, dict[str, Known]]:
    """Return the checked shot and what it teaches about names; the stream's memory then holds its settings.

    Raises
    ------
    RecordError
        The memory is then as before.
    """
    started_us = started_us_of(record, machine)
    settings, structure = settings_of(record)
    settled = memory.settle(settings, machine)
    plan = settled.plan
    readings = readings_of(record.observables, machine, plan)
    swept = _swept(record, settled, machine, memory)
    memory.remember(settled)
    name = sequence_name(record)
    values_digest = digest_of_sum(memory.total)
    moving = memory.moving(swept)
    resting_sum = memory.total - sum(entry.hash for entry in moving.values())
    set_digest = digest_of_sum(resting_sum + hash_setting(machine.name, "machine"))
    derivation = derivation_of(record.derivation)
    uid = record.uid or digest_text(record.machine, str(started_us), name, values_digest.hex()).hex()
    content = digest_content((
        record.machine, name, started_us, values_digest.hex(), structure and structure[0], record.scan, sorted(swept),
        record.planned_shots, record.last, record.reference, record.failed, record.note,
        [frame.model_dump() for frame in record.frames], *readings_content(readings, derivation),
    ))  # fmt: skip
    wish = ScanWish(record.scan, swept, record.planned_shots, record.last)
    shot = CheckedShot(
        uid, machine, name, structure, started_us, wish, record.reference, values_digest,
        set_digest, content, None, moving, readings, derivation, record.failed, record.note, record.frames,
        record.uid is not None,
    )  # fmt: skip
    return shot, plan


def readings_content(readings: Mapping[str, ReadValue], derivation: Derivation | None) -> tuple[Any, Any]:
    """Return plain values that are equal for equal readings by the same derivation."""
    return sorted(readings.items()), derivation.model_dump() if derivation else None


def _swept(
    record: ShotRecord, settled: Settled, machine: MachineNames, memory: StreamMemory
) -> tuple[str, ...]:
    swept = tuple(dict.fromkeys(record.swept))
    for name in swept:
        if (made_of := machine.settings_behind(name)) is not None:
            absent = [each for each in made_of if not _is_stated(each, settled, memory)]
            if absent:
                wanted = f"{', '.join(absent)} in this record: the card derives {name} of it"
                raise RecordError("swept", shorten(name), wanted)
        elif not _is_stated(name, settled, memory):
            raise RecordError("swept", shorten(name), "the name of a parameter of this record")
    return swept


def _is_stated(name: str, settled: Settled, memory: StreamMemory) -> bool:
    return name in settled.changed or (name in memory.entries and name not in settled.vanished)
