"""Notes: what people write down about a shot, a scan, a fit or a night, and finding it again.

A note names its subject in a text, as `shot 12`, `scan 3`, `fit 7` (ids) or `night heron 2026-10-05`. The note of a
record is a note on its shot.
"""

from __future__ import annotations

import unicodedata
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from datetime import date, datetime
from typing import TYPE_CHECKING, Any

from sqlalchemy import ColumnElement, Connection, Row, select, update

from nightfold import tables
from nightfold.errors import NotFound, RequestError
from nightfold.ledger.names import insert_row
from nightfold.ledger.rows import chunks
from nightfold.ledger.selecting import find_machine, moment_us, scan_key, the_machine
from nightfold.ledger.setting_aside import find_shots
from nightfold.records import clean_text
from nightfold.timestamps import from_us, to_us, utc_times

if TYPE_CHECKING:
    import pandas as pd

COLUMNS = ("at", "by", "kind", "about", "machine", "text", "subject")


@dataclass(frozen=True, slots=True)
class Note:
    """One note.

    Attributes
    ----------
    at : datetime
        When it was written, UTC; for the note of a record, when its shot started.
    by : str or None
    kind : {'shot', 'scan', 'fit', 'night'}
    about : str
        uid of the shot, key of the scan, id of the fit, date of the night.
    machine : str
        The empty text where the subject is gone.
    text : str
        May have several lines.
    subject : str
        The subject as the store names it: kind and id, or ``night MACHINE DATE``.
    """

    at: datetime
    by: str | None
    kind: str
    about: str
    machine: str
    text: str
    subject: str


def shot_subject(shot_id: int) -> str:
    """Return how a note names its shot."""
    return f"shot {shot_id}"


def scan_subject(scan_id: int) -> str:
    """Return how a note names its scan."""
    return f"scan {scan_id}"


def fit_subject(fit_id: int) -> str:
    """Return how a note names its fit."""
    return f"fit {fit_id}"


def night_subject(machine: str, night: date) -> str:
    """Return how a note names its night."""
    return f"night {machine} {night.isoformat()}"


def find_subject(
    connection: Connection,
    *,
    shot: str | None = None,
    scan_id: int | None = None,
    fit: int | None = None,
    night: date | str | None = None,
    machine: str | None = None,
) -> str | None:
    """Return the subject that is given; None if none is.

    Raises
    ------
    NotFound
        If there is no such shot, fit or machine, or the night is no date.
    ChoiceNeeded
        If there are several machines and none is named.
    ValueError
        If more than one subject is given.
    """
    given = {"shot": shot, "scan": scan_id, "fit": fit, "night": night}
    named = [name for name, value in given.items() if value is not None]
    if len(named) > 1:
        raise RequestError(f"note: found {' and '.join(named)}, wanted one of {', '.join(given)}")
    if shot is not None:
        return shot_subject(next(iter(find_shots(connection, [shot]).values())).id)
    if scan_id is not None:
        return scan_subject(scan_id)
    if fit is not None:
        if connection.execute(select(tables.fit.c.id).where(tables.fit.c.id == fit)).first() is None:
            raise NotFound(f"fit {fit}: not in this store; 'nightfold fits' lists those there are")
        return fit_subject(fit)
    if night is not None:
        return night_subject(the_machine(connection, machine).name, read_night(night))
    return None


def read_night(night: date | str) -> date:
    """Return the date of a night, from a date or a text such as ``2026-10-05``.

    Raises
    ------
    NotFound
        If it is no date.
    """
    if isinstance(night, datetime):
        raise NotFound(f"night {night.isoformat()}: wanted the date of its evening, without a time")
    try:
        return night if isinstance(night, date) else date.fromisoformat(night)
    except ValueError:
        raise NotFound(f"night {night!r}: wanted the date of its evening, such as 2026-10-05") from None


def add_note(connection: Connection, subject: str, text: str, by: str | None, at_us: int) -> Note:
    """Enter a note and return it.

    Raises
    ------
    ValueError
        If the text is empty, or holds NUL.
    """
    try:
        clean = clean_text(text).replace("\r\n", "\n").replace("\r", "\n").strip()
    except ValueError as problem:
        raise RequestError(f"note: wanted {problem}") from None
    if not clean:
        raise RequestError("note: found no text, wanted what is to be noted")
    row = {"subject": subject, "text": clean, "by": by, "at_us": at_us}
    note_id = insert_row(connection, tables.note, row)
    return _read(connection, tables.note.c.id == note_id)[0]


def find_notes(
    connection: Connection,
    words: str | Iterable[str] | None = None,
    *,
    subject: str | None = None,
    machine: str | None = None,
    since: datetime | str | None = None,
    until: datetime | str | None = None,
) -> list[Note]:
    """Return notes, the newest last.

    Parameters
    ----------
    words : str or iterable of str, optional
        All must occur in the text; capitals and accents do not matter.
    subject : str, optional
        As `find_subject` returns it; those of a fit include those of the fits it replaced.
    machine : str, optional
        Only what is about this machine.
    since, until : datetime or str, optional
        Written from then (included), before then; without an offset local to the machine.

    Raises
    ------
    NotFound
    """
    note = tables.note
    terms: list[ColumnElement[bool]] = [note.c.id.isnot(None)]
    if subject is not None:
        terms.append(note.c.subject.in_(_with_replaced(connection, subject)))
    name = None if machine is None else find_machine(connection, machine).name
    zone = _zone(connection, name)
    if since is not None:
        terms.append(note.c.at_us >= moment_us(since, zone))
    if until is not None:
        terms.append(note.c.at_us < moment_us(until, zone))
    condition = terms[0]
    for term in terms[1:]:
        condition &= term
    wanted = [folded(word) for part in _listed(words) for word in part.split()]
    return [
        entry
        for entry in _read(connection, condition)
        if (name is None or entry.machine == name) and all(word in folded(entry.text) for word in wanted)
    ]


def note_table(notes: Sequence[Note]) -> pd.DataFrame:
    """Return notes as a frame with a row each: at (UTC), by, kind, about, machine, text, subject."""
    import numpy as np
    import pandas as pd

    frame = pd.DataFrame({name: [getattr(note, name) for note in notes] for name in COLUMNS}, dtype=object)
    frame["at"] = utc_times(np.array([to_us(note.at) for note in notes], dtype=np.int64))
    return frame


def folded(text: str) -> str:
    """Return a text for comparing: without capitals and accents, compatible signs as one."""
    plain = unicodedata.normalize("NFKD", unicodedata.normalize("NFKD", text).casefold())
    return plain if plain.isascii() else "".join(sign for sign in plain if not unicodedata.combining(sign))


def hand_over_notes(connection: Connection, scan_id: int, heir: int) -> None:
    """Give the notes of a scan to the one that has its shots now."""
    note = tables.note
    old = note.c.subject == scan_subject(scan_id)
    connection.execute(update(note).where(old).values(subject=scan_subject(heir)))


def has_notes(connection: Connection, subject: str) -> bool:
    """Return whether anything is noted about a subject."""
    note = tables.note
    return connection.execute(select(note.c.id).where(note.c.subject == subject).limit(1)).first() is not None


def _listed(words: str | Iterable[str] | None) -> Iterable[str]:
    return () if words is None else (words,) if isinstance(words, str) else words


def _zone(connection: Connection, machine: str | None) -> str:
    if machine is not None:
        return str(find_machine(connection, machine).zone)
    zones = set(connection.execute(select(tables.machine.c.zone)).scalars())
    return zones.pop() if len(zones) == 1 else "UTC"


def _with_replaced(connection: Connection, subject: str) -> list[str]:
    """Return a subject; of a fit, those of the fits it replaced too."""
    found = [subject]
    kind, _, number = subject.partition(" ")
    fit = tables.fit
    while kind == "fit":
        earlier = connection.execute(select(fit.c.replaces).where(fit.c.id == int(number))).scalar()
        if earlier is None or fit_subject(earlier) in found:
            break
        number = str(earlier)
        found.append(fit_subject(earlier))
    return found


def _read(connection: Connection, condition: ColumnElement[bool]) -> list[Note]:
    note = tables.note
    rows = list(connection.execute(select(note).where(condition).order_by(note.c.at_us, note.c.id)))
    return _named(connection, rows)


def _named(connection: Connection, rows: Sequence[Row[Any]]) -> list[Note]:
    """Return notes with what they are about in words."""
    ids: dict[str, set[int]] = {"shot": set(), "scan": set(), "fit": set()}
    for row in rows:
        kind, _, rest = row.subject.partition(" ")
        if kind in ids:
            ids[kind].add(int(rest))
    known = _subjects(connection, ids)
    return [_note(row, known) for row in rows]


def _note(row: Row[Any], known: Mapping[str, tuple[str, str]]) -> Note:
    kind, _, rest = row.subject.partition(" ")
    if kind == "night":
        machine, _, about = rest.rpartition(" ")
    else:
        about, machine = known.get(row.subject, (rest, ""))
    return Note(from_us(row.at_us), row.by, kind, about, machine, row.text, row.subject)


def _subjects(connection: Connection, ids: Mapping[str, set[int]]) -> dict[str, tuple[str, str]]:
    """Return name and machine of shots, scans and fits, by subject."""
    shot, scan, fit = tables.shot, tables.scan, tables.fit
    sequence, machine = tables.sequence, tables.machine
    of_machine = machine.c.id == sequence.c.machine_id
    found: dict[str, tuple[str, str]] = {}
    for part in chunks(sorted(ids["shot"])):
        query = select(shot.c.id, shot.c.uid, machine.c.name).select_from(shot)
        query = query.join(sequence, sequence.c.id == shot.c.sequence_id).join(machine, of_machine)
        for row in connection.execute(query.where(shot.c.id.in_(part))):
            found[shot_subject(row.id)] = row.uid, row.name
    scans = select(scan.c.id, scan.c.label, scan.c.round, machine.c.name).select_from(scan)
    scans = scans.join(sequence, sequence.c.id == scan.c.sequence_id).join(machine, of_machine)
    for part in chunks(sorted(ids["scan"])):
        for one in connection.execute(scans.where(scan.c.id.in_(part))):
            found[scan_subject(one.id)] = scan_key(one.id, one.label, one.round) or "", one.name
    fits = scans.add_columns(fit.c.id.label("fit_id")).join(fit, fit.c.scan_id == scan.c.id)
    for part in chunks(sorted(ids["fit"])):
        for kept in connection.execute(fits.where(fit.c.id.in_(part))):
            found[fit_subject(kept.fit_id)] = str(kept.fit_id), kept.name
    return found
