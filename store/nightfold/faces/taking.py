"""Handing over: the machine card, records, files."""

from __future__ import annotations

import copy
from collections.abc import Callable, Iterable, Iterator, Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

from nightfold.faces.face import Face, Where
from nightfold.ledger import names
from nightfold.ledger.cards import cards_in_force, keep_card
from nightfold.ledger.outcome import Incoming, Intake
from nightfold.ledger.sources import SourceLog
from nightfold.timestamps import now_us

if TYPE_CHECKING:
    from nightfold.card import MachineCard
    from nightfold.intake.csvcolumns import CsvColumns


class Taking(Face):
    """Handing over records and the machine card."""

    def use_card(self, path: Where) -> MachineCard:
        """Read a machine card, check it against the store and make it the one in force.

        Raises
        ------
        CardError
            If the card cannot be read, or contradicts what is stored.
        """
        from nightfold.card import read_card
        from nightfold.ledger.deriving import derived_quantities
        from nightfold.scans.following import follow_card

        card = read_card(Path(path))
        self._writer.forget()
        known = names.Names()
        with self._session.writing() as connection:
            known.load(connection)
            machine_id = known.find(card.machine).id
            before = derived_quantities(connection).get(machine_id, {})
            keep_card(connection, known, card, now_us())
            if before:
                follow_card(connection, machine_id, before)
        return card

    def take(
        self, records: Iterable[Mapping[str, Any]], *, progress: Callable[[int], None] | None = None
    ) -> Intake:
        """Take shot records and return how many were new, known, amended, and which were refused.

        Parameters
        ----------
        records : iterable of mappings
            Shot records, format 1 (docs/shot-record.md).
        progress : callable, optional
            Called now and then with the number of records taken.

        Notes
        -----
        Records are taken in batches, each one transaction: one by one from an iterator that makes us wait for each
        (so that a shot is safe as soon as it is handed over), up to 500 from one that does not. Handing the same
        records over again is harmless.
        """
        stream = (
            Incoming(record, "records", number, number) for number, record in enumerate(_own(records), 1)
        )
        return self._writer.take(stream, progress=progress)

    def take_file(
        self,
        path: Where,
        *,
        columns: CsvColumns | None = None,
        progress: Callable[[int], None] | None = None,
    ) -> Intake:
        """Take a file of JSON lines or CSV; `progress` is called with the number of bytes read.

        Raises
        ------
        NotFound, RecordError
            If there is no such file, or a CSV header cannot be understood.
        """
        from nightfold.intake.files import read_file

        where = Path(path)
        with self._session.reading() as connection:
            cards = cards_in_force(connection)
            aliases = names.read_aliases(connection)
            machines = names.read_names(connection)
        named = aliases.get(columns.machine, columns.machine) if columns and columns.machine else None
        card = cards.get(named) if named else next(iter(cards.values())) if len(cards) == 1 else None
        own = machines.get(named) if named else next(iter(machines.values())) if len(machines) == 1 else None
        records = read_file(where, columns=columns, card=card, known=own.roles if own else None)
        return self._writer.take(records, SourceLog(where), progress)

    def take_sensors(
        self, records: Iterable[Mapping[str, Any]], *, progress: Callable[[int], None] | None = None
    ) -> Intake:
        """Take readings of sensors, which belong to no shot; return how many were new and known, and what was refused.

        Parameters
        ----------
        records : iterable of mappings
            ``{"machine": …, "at": …, "readings": {name: number or {"value", "unit"}}}`` (docs/sensors.md).
        progress : callable, optional
            Called now and then with the number of records taken.

        Notes
        -----
        ``new`` and ``known`` count readings, ``refused`` lists records. As with `take`, each batch is one transaction,
        a record that we were made to wait for is stored at once, and everything can be handed over again.
        """
        from nightfold.sensors.taking import take_readings

        stream = (
            Incoming(record, "records", number, number)
            for number, record in enumerate(_own(records, "take_sensors"), 1)
        )
        return take_readings(self._session, stream, progress=progress)

    def take_sensor_file(
        self,
        path: Where,
        *,
        machine: str | None = None,
        at: str = "at",
        delimiter: str | None = None,
        progress: Callable[[int], None] | None = None,
    ) -> Intake:
        """Take a file of sensor readings, JSON lines or a table, as `take_sensors` does.

        Parameters
        ----------
        path : path or str
        machine : str, optional
            Of what does not name its machine; without it the one with a card, if there is one alone.
        at, delimiter : str, optional
            Of a table: the column with the time, and what parts the columns.
        progress : callable, optional
            Called with the number of bytes read.

        Raises
        ------
        NotFound, RecordError, ChoiceNeeded
            If there is no such file, or the head of a table cannot be understood.
        """
        from nightfold.intake.files import is_table, read_json, usual_delimiter
        from nightfold.sensors.table import read_readings_table
        from nightfold.sensors.taking import take_readings

        where = Path(path)
        if is_table(where):
            records = read_readings_table(where, at=at, delimiter=delimiter or usual_delimiter(where))
        else:
            records = read_json(where)
        if machine is None:
            with self._session.reading() as connection:
                cards = cards_in_force(connection)
            machine = next(iter(cards)) if len(cards) == 1 else None
        log = SourceLog(where)
        return take_readings(self._session, records, machine=machine, log=log, progress=progress)


def _own(records: Iterable[Mapping[str, Any]], verb: str = "take") -> Iterator[Any]:
    """Yield the records; those of a generator as copies, for it may go on to change and reuse what it gave."""
    if isinstance(records, (Mapping, str, bytes)):  # it would be taken apart key by key
        raise TypeError(
            f"{verb}: found one {type(records).__name__}, wanted an iterable of records such as [record]"
        )
    if isinstance(records, (list, tuple)):
        yield from records
    else:
        yield from map(copy.deepcopy, records)
