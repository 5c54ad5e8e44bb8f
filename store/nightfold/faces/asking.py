"""Reading: shots, names, nights, edits."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from datetime import date, datetime
from typing import TYPE_CHECKING, Any

from sqlalchemy import select

from nightfold import tables
from nightfold.faces.face import Face
from nightfold.ledger import cards, deriving, edits, nightly, notes, selecting
from nightfold.ledger.names import read_aliases
from nightfold.ledger.shot import ShotView, view_shot
from nightfold.timestamps import to_us, utc_times

if TYPE_CHECKING:
    import pandas as pd

    from nightfold.card import MachineCard
    from nightfold.ledger.cards import CardUsed
    from nightfold.ledger.history import ShotHistory
    from nightfold.ledger.sequences import SequenceView


class Asking(Face):
    """Reading shots and what hangs on them."""

    def cards(self) -> dict[str, MachineCard]:
        """Return the card in force of each machine that has one."""
        with self._session.reading() as connection:
            return cards.cards_in_force(connection)

    def cards_used(self, machine: str) -> list[CardUsed]:
        """Return the cards that a machine had, the oldest first: when each came into force, and what it changed.

        Raises
        ------
        NotFound
        """
        with self._session.reading() as connection:
            return cards.cards_used(connection, selecting.find_machine(connection, machine).id)

    def machines(self) -> list[str]:
        """Return the names of the machines, sorted."""
        with self._session.reading() as connection:
            return sorted(connection.execute(select(tables.machine.c.name)).scalars())

    def machine(self, name: str | None = None) -> str:
        """Return the name under which the store has a machine: its own, or that of the one it was merged into.

        Parameters
        ----------
        name : str, optional
            Without it the only machine there is.

        Raises
        ------
        NotFound, ChoiceNeeded
        """
        with self._session.reading() as connection:
            return str(selecting.the_machine(connection, name).name)

    def aliases(self) -> dict[str, str]:
        """Return the other names of machines, and which machine each means since they were merged."""
        with self._session.reading() as connection:
            return read_aliases(connection)

    def zone(self, machine: str) -> str:
        """Return the time zone in which a machine's times are shown."""
        with self._session.reading() as connection:
            return str(selecting.find_machine(connection, machine).zone)

    def shots(
        self,
        parameters: Sequence[str] = (),
        observables: Sequence[str] = (),
        *,
        machine: str | None = None,
        sequence: str | None = None,
        scan: int | str | None = None,
        since: datetime | str | None = None,
        until: datetime | str | None = None,
        set_aside: bool = False,
        limit: int | None = None,
        sensors: Sequence[str] = (),
        align: str = "nearest",
    ) -> pd.DataFrame:
        """Return shots in time order, a row each.

        Parameters
        ----------
        parameters, observables : sequence of str
            A column each; ``<observable>_stderr`` gives the standard uncertainty.
        machine, sequence, scan, since, until
            Narrow the choice; without any, all shots. `since` is included, `until` is not.
        set_aside : bool
            Include shots set aside.
        limit : int, optional
            Only the newest so many.
        sensors : sequence of str
            A column each, of what these sensors showed (docs/sensors.md).
        align : {'nearest', 'mean'}
            The reading nearest to the start of each shot, or the mean over the shot.

        Returns
        -------
        DataFrame
            ``uid``, ``started`` (UTC), ``sequence``, ``scan``, then what was asked for; units in ``attrs["units"]``.

        Raises
        ------
        NotFound
            If a machine, sequence, scan, parameter, observable or sensor is not in the store.
        ChoiceNeeded
            If several machines have a name in different units, or a column would have to show two things.
        """
        from nightfold.scans.listing import find_scan

        parameters, observables = _listed(parameters), _listed(observables)
        scan_id = None if scan is None else find_scan(self._session, scan).id
        chosen = selecting.Selection(machine, sequence, scan_id, since, until, set_aside, limit)
        with self._session.reading() as connection:
            table = selecting.read_table(connection, chosen, parameters, observables)
            if sensors:
                from nightfold.sensors.alongside import add_sensors

                add_sensors(connection, table, chosen, selecting.listed(sensors), align)
            return table

    def shot(self, uid: str) -> ShotView:
        """Return everything of one shot, by its uid or the beginning of it.

        Raises
        ------
        NotFound
        """
        with self._session.reading() as connection:
            return view_shot(connection, uid)

    def history(self, uid: str) -> ShotHistory:
        """Return what happened to a shot since it was taken, by its uid or the beginning of it.

        Readings that were replaced, corrected settings, when it was set aside and put back, notes, scans it was put
        into by hand, and the fits that looked at it, in time order; and of each observable every reading it had.

        Raises
        ------
        NotFound
        """
        from nightfold.fits.kept import list_fits
        from nightfold.ledger.history import read_history

        stale = {fit.id for fit in list_fits(self._session, None, [uid]) if fit.stale}
        with self._session.reading() as connection:
            return read_history(connection, uid, stale)

    def nights(self) -> pd.DataFrame:
        """Return a row a night and machine.

        Columns: ``night`` (date of its evening), ``machine``, ``first``, ``last`` (local), ``shots``, ``set_aside``,
        ``references``, ``scans`` (counts), ``sequences``.
        """
        with self._session.reading() as connection:
            return nightly.night_table(connection)

    def night_of(self, moments: Sequence[datetime], machine: str | None = None) -> list[date]:
        """Return the night that each moment belongs to, as `nights` names it: by the date of its evening.

        Parameters
        ----------
        moments : sequence of datetime
            Aware.
        machine : str, optional
            Needed where there are several.

        Raises
        ------
        NotFound, ChoiceNeeded
        """
        with self._session.reading() as connection:
            row = selecting.the_machine(connection, machine)
            return nightly.nights_at(connection, row, [to_us(moment) for moment in moments])

    def notes(
        self,
        words: str | Iterable[str] | None = None,
        *,
        shot: str | None = None,
        scan: int | str | None = None,
        fit: int | None = None,
        night: date | str | None = None,
        machine: str | None = None,
        since: datetime | str | None = None,
        until: datetime | str | None = None,
    ) -> pd.DataFrame:
        """Return notes, a row each, the newest last.

        Parameters
        ----------
        words : str or iterable of str, optional
            All must occur in the text; capitals and accents do not matter.
        shot, scan, fit, night
            Only those on this subject (one of them). Notes on fits that a fit has replaced count as its own.
        machine : str, optional
            Only what is about this machine.
        since, until : datetime or str, optional
            Written from then on (included), before then. The note of a record counts as written when its shot started.

        Returns
        -------
        DataFrame
            ``at`` (UTC), ``by``, ``kind`` (shot, scan, fit or night), ``about`` (uid of the shot, key of the scan, id
            of the fit, date of the night), ``machine``, ``text``, ``subject`` (kind and id, or machine and date).

        Raises
        ------
        NotFound, ChoiceNeeded
            If the subject, or the machine, is not there or must be named.
        ValueError
            If there are several subjects.
        """
        from nightfold.scans.listing import find_scan

        scan_id = None if scan is None else find_scan(self._session, scan).id
        with self._session.reading() as connection:
            subject = notes.find_subject(
                connection, shot=shot, scan_id=scan_id, fit=fit, night=night, machine=machine
            )
            found = notes.find_notes(
                connection, words, subject=subject, machine=machine, since=since, until=until
            )
        return notes.note_table(found)

    def parameters(self, machine: str | None = None) -> pd.DataFrame:
        """Return the parameters known: machine, name, kind, unit, and of derived ones the expression (else empty)."""
        return self._named(tables.parameter, machine)

    def observables(self, machine: str | None = None) -> pd.DataFrame:
        """Return the observables known: machine, name, unit, and of derived ones the expression (else empty)."""
        return self._named(tables.observable, machine)

    def _named(self, table: Any, machine: str | None) -> pd.DataFrame:
        import pandas as pd

        with self._session.reading() as connection:
            query = select(tables.machine.c.name.label("machine"), table).join(
                tables.machine, tables.machine.c.id == table.c.machine_id
            )
            if machine is not None:
                query = query.where(tables.machine.c.id == selecting.find_machine(connection, machine).id)
            rows = connection.execute(query.order_by(tables.machine.c.name, table.c.name)).mappings().all()
            known = {row["machine"] for row in rows}
            derived = {
                (item.machine, item.name): item.expression
                for name in known
                for item in deriving.list_versions(connection, name)
                if item.in_force
            }
        columns = ["machine", "name", *(["kind"] if "kind" in table.c else []), "unit", "expression"]
        entries = [{**row, "expression": derived.get((row["machine"], row["name"]), "")} for row in rows]
        return pd.DataFrame(entries, columns=columns)

    def derived(self, machine: str | None = None, *, versions: bool = False) -> pd.DataFrame:
        """Return the quantities that the cards in force derive.

        Parameters
        ----------
        machine : str, optional
            Of this machine only.
        versions : bool
            Earlier expressions too, also of quantities that the card has no longer.

        Returns
        -------
        DataFrame
            ``machine``, ``name``, ``of`` ("parameter" or "observable"), ``expression``, ``unit``, ``version``,
            ``since`` (UTC, when a card first stated it), ``in_force``.

        Raises
        ------
        NotFound
            If the machine is not in the store.
        """
        import pandas as pd

        with self._session.reading() as connection:
            names = connection.execute(
                select(tables.machine.c.name).order_by(tables.machine.c.name)
            ).scalars()
            own = list(names) if machine is None else [selecting.find_machine(connection, machine).name]
            found = [item for name in own for item in deriving.list_versions(connection, name)]
        columns = ["machine", "name", "of", "expression", "unit", "version", "since", "in_force"]
        rows = [[getattr(item, column) for column in columns] for item in found if versions or item.in_force]
        return pd.DataFrame(rows, columns=columns)

    def sequences(self, machine: str | None = None) -> pd.DataFrame:
        """Return a row a sequence: machine, sequence, versions, shots (counts), first, last (UTC).

        Raises
        ------
        NotFound
            If the machine is not in the store.
        """
        from nightfold.ledger.sequences import list_sequences

        with self._session.reading() as connection:
            return list_sequences(connection, machine)

    def sequence(self, name: str, *, machine: str | None = None) -> SequenceView:
        """Return a sequence: its versions by structure, their steps in time, and what differs between shots.

        Raises
        ------
        NotFound
            If the machine, or a sequence of that name, is not in the store.
        ChoiceNeeded
            If several machines have a sequence of that name.
        """
        from nightfold.ledger.sequences import view_sequence

        return view_sequence(self._session, name, machine)

    def edits(
        self,
        since: datetime | str | None = None,
        until: datetime | str | None = None,
        *,
        machine: str | None = None,
    ) -> pd.DataFrame:
        """Return the parameters that a person changed: at (UTC), parameter, old, new, sequence.

        A swept parameter is not edited, and the same change seen in several sequences is one edit. ``at`` is the first
        shot that shows the new value.
        """
        import numpy as np
        import pandas as pd

        with self._session.reading() as connection:
            found = edits.find_edits(connection, since, until, machine)
        frame = pd.DataFrame(
            {
                "at": utc_times(np.array([edit.at_us for edit in found], dtype=np.int64)),
                "parameter": [edit.parameter for edit in found],
                "old": pd.Series([edit.old for edit in found], dtype=object),
                "new": pd.Series([edit.new for edit in found], dtype=object),
                "sequence": [edit.sequence for edit in found],
            }
        )
        frame.attrs["units"] = {edit.parameter: edit.unit for edit in found}
        return frame


def _listed(names: Sequence[str]) -> Sequence[str]:
    return (names,) if isinstance(names, str) else tuple(names)
