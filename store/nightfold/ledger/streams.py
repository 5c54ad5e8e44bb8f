"""The ingest rule: what moves goes with the shot, what rests is stored once.

Per stream (a machine's sequence) a parameter moves if the record declares it swept or if it changed within the stream's
last 20 shots; everything else is the value set, found or made by its digest. The memory of 20 shots decides only how
compactly a shot is stored, never what is stored.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from typing import Any

from sqlalchemy import Connection, select

from nightfold import tables
from nightfold.errors import RecordError
from nightfold.ledger.names import Known, MachineNames
from nightfold.records import clean_name, shorten
from nightfold.settings import Value, hash_setting, setting_value, token_of

MEMORY = 20
_PLAIN = {float, int, str, bool}


class _UNREAD:
    """The type of nothing: a setting that must be read again when it is next stated."""


@dataclass(slots=True)
class Entry:
    """The last value of one parameter in a stream, as stated and in canonical form.

    What is stated next is the same if it is of `raw_type`, equal to `raw`, and, because 1, 1.0 and True are equal to
    Python, its value is of `inner_type`, where that is not None.
    """

    raw: Any
    raw_type: type
    inner_type: type | None
    value: Value
    hash: int
    moved_at: int = -MEMORY


@dataclass(slots=True)
class Settled:
    """A record's settings held against the stream's memory, not yet remembered."""

    changed: dict[str, Entry]
    vanished: list[str]
    plan: dict[str, Known]


@dataclass(slots=True)
class StreamMemory:
    """What a writer remembers of a stream: the last value of every parameter, and when it last changed."""

    entries: dict[str, Entry] = field(default_factory=dict)
    total: int = 0
    count: int = 0
    recent: dict[str, int] = field(default_factory=dict)
    generation: int = 0

    def settle(self, settings: Mapping[Any, Any], machine: MachineNames) -> Settled:
        """Hold a record's settings against the memory; the unchanged ones, nearly all, cost next to nothing.

        Raises
        ------
        RecordError
            If a setting cannot be taken; the memory is as before.
        """
        if self.generation != machine.generation:
            self._reread(machine)
        entries = self.entries
        known = entries.get
        changed: dict[str, Entry] = {}
        plan: dict[str, Known] = {}
        hits = 0
        for key, raw in settings.items():
            entry = known(key)
            if entry is not None and type(raw) is entry.raw_type and entry.raw == raw:
                inner = entry.inner_type
                if inner is None or type(raw["value"]) is inner:  # type: ignore[index] # then it is a dict
                    hits += 1
                    continue
            self._settle_one(key, raw, settings, machine, changed, plan)
        old = sum(1 for name in changed if name in entries)
        vanished = [] if hits + old == len(entries) else self._missing(settings, changed)
        return Settled(changed, vanished, plan)

    def _settle_one(
        self,
        key: Any,
        raw: Any,
        settings: Mapping[Any, Any],
        machine: MachineNames,
        changed: dict[str, Entry],
        plan: dict[str, Known],
    ) -> None:
        try:
            name = clean_name(key)
        except ValueError as problem:
            raise RecordError("parameters", f"the name {shorten(key)}", str(problem)) from None
        path = f"parameters.{name}"
        if name in changed or (name != key and name in settings):
            raise RecordError(path, "the same name twice", "each parameter once")
        settled = setting_value(raw, path)
        if settled is None:
            return
        value, known = machine.settle(name, *settled, path)
        if known.id is None or known is not machine.parameters.get(name):
            plan[name] = known
        own = dict(raw) if type(raw) is dict else raw  # the caller may go on to change his
        changed[name] = Entry(own, *_types_of(own), value, hash_setting(name, value.token))

    def _missing(self, settings: Mapping[Any, Any], changed: dict[str, Entry]) -> list[str]:
        stated = {clean_name(key) for key, raw in settings.items() if not _is_null(raw)}
        return [name for name in self.entries if name not in stated and name not in changed]

    def _reread(self, machine: MachineNames) -> None:
        """After a unit was adopted or the card changed: what was stated must be read again, the values stand."""
        for entry in self.entries.values():
            entry.raw_type = _UNREAD
        self.generation = machine.generation

    def remember(self, settled: Settled) -> None:
        """Make a record's settings the stream's last ones."""
        entries = self.entries
        self.count += 1
        for name in settled.vanished:
            self.total -= entries.pop(name).hash
            self.recent.pop(name, None)
        for name, new in settled.changed.items():
            old = entries.get(name)
            if old is None:
                self.total += new.hash
            elif old.hash != new.hash:
                self.total += new.hash - old.hash
                new.moved_at = self.count
                self.recent[name] = self.count
            else:
                new.moved_at = old.moved_at
            entries[name] = new
        if self.recent:
            limit = self.count - MEMORY
            for name in [name for name, at in self.recent.items() if at <= limit]:
                del self.recent[name]

    def moving(self, swept: Iterable[str]) -> dict[str, Entry]:
        """Return the entries that go with the shot: declared swept, or changed within the last 20 shots."""
        entries = self.entries
        names = [*self.recent, *(name for name in swept if name not in self.recent)]
        return {name: entries[name] for name in names if name in entries}


def _types_of(raw: Any) -> tuple[type, type | None]:
    """Return `raw_type` and `inner_type` of an entry; lists and arrays are read again every time."""
    if type(raw) is not dict:
        return (type(raw), None) if type(raw) in _PLAIN else (_UNREAD, None)
    inner = raw["value"]
    if type(inner) not in _PLAIN:
        return _UNREAD, None
    unmistakable = type(inner) is str or (type(inner) is float and not inner.is_integer())
    return dict, None if unmistakable else type(inner)


def _is_null(raw: Any) -> bool:
    return raw is None or (isinstance(raw, Mapping) and raw.get("value") is None)


def recall(connection: Connection, machine: MachineNames, sequence_id: int) -> StreamMemory:
    """Return the memory of a stream as its last 20 shots left it."""
    shot, rows, sets = tables.shot, tables.shot_value, tables.set_value
    last = connection.execute(
        select(shot.c.id, shot.c.set_id)
        .where(shot.c.sequence_id == sequence_id)
        .order_by(shot.c.started_us.desc(), shot.c.id.desc())
        .limit(MEMORY)
    ).all()
    memory = StreamMemory(generation=machine.generation)
    if not last:
        return memory
    names = {known.id: (name, known.kind) for name, known in machine.parameters.items()}
    contents: dict[int, dict[str, Value]] = {}
    for row in connection.execute(select(sets).where(sets.c.set_id.in_({item.set_id for item in last}))):
        name, kind = names[row.parameter_id]
        contents.setdefault(row.set_id, {})[name] = Value(kind, row.num, row.exact)  # type: ignore[arg-type]
    moved: dict[int, dict[str, Value]] = {}
    for row in connection.execute(select(rows).where(rows.c.shot_id.in_([item.id for item in last]))):
        name, kind = names[row.parameter_id]
        moved.setdefault(row.shot_id, {})[name] = Value(kind, row.num, row.exact)  # type: ignore[arg-type]
    previous: dict[str, Value] = {}
    for item in reversed(last):
        values = {**contents.get(item.set_id, {}), **moved.get(item.id, {})}
        memory.count += 1
        for name, value in values.items():
            if name in previous and previous[name] != value:
                memory.recent[name] = memory.count
        previous = values
    for name, value in previous.items():
        code = hash_setting(name, token_of(value.kind, value.num, value.exact))
        memory.entries[name] = Entry(None, _UNREAD, None, value, code, memory.recent.get(name, -MEMORY))
        memory.total += code
    memory.recent = {name: at for name, at in memory.recent.items() if name in memory.entries}
    return memory
