"""The store as people use it: hand over records, read shots and scans, fit (`nightfold.opening` opens one)."""

from __future__ import annotations

import copy
import os
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from datetime import datetime
from pathlib import Path
from types import TracebackType
from typing import TYPE_CHECKING, Any, Self

from sqlalchemy import select

from nightfold import session, tables
from nightfold.ledger import edits, names, nightly, selecting, setting_aside
from nightfold.ledger.outcome import Incoming, Intake
from nightfold.ledger.shot import ShotView, view_shot
from nightfold.ledger.sources import SourceLog
from nightfold.ledger.writing import Writer
from nightfold.scans.assigning import ScanFolder
from nightfold.timestamps import now_us, utc_times

if TYPE_CHECKING:
    import pandas as pd

    from nightfold.card import MachineCard
    from nightfold.fits.kept import KeptFit
    from nightfold.fits.many import FitTable
    from nightfold.fits.result import FitResult
    from nightfold.intake.csvcolumns import CsvColumns
    from nightfold.scans.scan import Scan

Where = str | os.PathLike[str]


class Store:
    """An open store; a context manager that gives its connections back at the end.

    Made by `open_store`. Every method is one transaction, or, where records are taken, one a batch.
    """

    def __init__(self, opened: session.Session) -> None:
        self._session = opened
        self._writer = Writer(opened, ScanFolder())

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, value: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def close(self) -> None:
        """Give back every connection; the store must not be used afterwards."""
        self._session.close()

    @property
    def where(self) -> str:
        """The file or database, as shown to people (without a password)."""
        return str(self._session.place)

    # ------------------------------------------------------------------ writing

    def use_card(self, path: Where) -> MachineCard:
        """Read a machine card, check it against the store and make it the one in force.

        Raises
        ------
        CardError
            If the card cannot be read, or contradicts what is stored.
        """
        from nightfold.card import read_card

        card = read_card(Path(path))
        self._writer.forget()
        known = names.Names()
        with self._session.writing() as connection:
            known.load(connection)
            names.keep_card(connection, known, card, now_us())
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
        cards = self.cards()
        named = columns.machine if columns else None
        card = cards.get(named) if named else next(iter(cards.values())) if len(cards) == 1 else None
        records = read_file(where, columns=columns, card=card)
        return self._writer.take(records, SourceLog(where), progress)

    def set_aside(self, uids: Sequence[str], reason: str, *, by: str | None = None) -> int:
        """Leave shots out of results, with a reason; return how many were not so already.

        Raises
        ------
        NotFound
            If a shot is not in the store.
        ValueError
            If the reason is empty.
        """
        with self._session.writing() as connection:
            return setting_aside.set_shots_aside(connection, uids, reason, by, None)

    def put_back(self, uids: Sequence[str], *, by: str | None = None) -> int:
        """Take shots into results again; return how many were set aside.

        Raises
        ------
        NotFound
            If a shot is not in the store.
        """
        with self._session.writing() as connection:
            return setting_aside.put_shots_back(connection, uids, by)

    # ------------------------------------------------------------------ reading

    def cards(self) -> dict[str, MachineCard]:
        """Return the card in force of each machine that has one."""
        with self._session.reading() as connection:
            texts = names.newest_cards(connection)
        cards = [names.stored_card(text) for text in texts.values()]
        return {card.machine: card for card in cards}

    def machines(self) -> list[str]:
        """Return the names of the machines, sorted."""
        with self._session.reading() as connection:
            return sorted(connection.execute(select(tables.machine.c.name)).scalars())

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

        Returns
        -------
        DataFrame
            ``uid``, ``started`` (UTC), ``sequence``, ``scan``, then what was asked for; units in ``attrs["units"]``.

        Raises
        ------
        NotFound
            If a machine, sequence, scan, parameter or observable is not in the store.
        ChoiceNeeded
            If several machines have a name in different units.
        """
        parameters, observables = _listed(parameters), _listed(observables)
        scan_id = None if scan is None else self.scan(scan).id
        chosen = selecting.Selection(machine, sequence, scan_id, since, until, set_aside, limit)
        with self._session.reading() as connection:
            return selecting.read_table(connection, chosen, parameters, observables)

    def shot(self, uid: str) -> ShotView:
        """Return everything of one shot, by its uid or the beginning of it.

        Raises
        ------
        NotFound
        """
        with self._session.reading() as connection:
            return view_shot(connection, uid)

    def nights(self) -> pd.DataFrame:
        """Return a row a night and machine.

        Columns: ``night`` (date of its evening), ``machine``, ``first``, ``last`` (local), ``shots``, ``set_aside``,
        ``references``, ``scans`` (counts), ``sequences``.
        """
        with self._session.reading() as connection:
            return nightly.night_table(connection)

    def parameters(self, machine: str | None = None) -> pd.DataFrame:
        """Return the parameters known: machine, name, kind, unit."""
        return self._named(tables.parameter, machine)

    def observables(self, machine: str | None = None) -> pd.DataFrame:
        """Return the observables known: machine, name, unit."""
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
        columns = ["machine", "name", *(["kind"] if "kind" in table.c else []), "unit"]
        return pd.DataFrame([dict(row) for row in rows], columns=columns)

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

    # ------------------------------------------------------------------ scans and fits

    def scans(self) -> list[Scan]:
        """Return every scan, oldest first."""
        from nightfold.scans.listing import list_scans

        return list_scans(self._session)

    def scan(self, key: int | str) -> Scan:
        """Return one scan: an int is an id, a text a label (its newest round) or ``label#round``.

        Raises
        ------
        NotFound
            If there is none.
        ChoiceNeeded
            If the label is used by several sequences.
        """
        from nightfold.scans.listing import find_scan

        return find_scan(self._session, key)

    def fit(
        self,
        scan: Scan | int | str,
        model: Any,
        *,
        observable: str,
        along: str | None = None,
        background: str | None = None,
        fixed: Mapping[str, float] | None = None,
        start: Mapping[str, float] | None = None,
        weights: str = "auto",
        robust: bool = True,
        keep: bool = True,
    ) -> FitResult | FitTable:
        """Fit a model to an observable of a scan, and keep the result with its provenance.

        Parameters
        ----------
        scan : Scan, int or str
        model : str, Model or lmfit.Model
        observable : str
        along : str, optional
            The axis to fit along; needed where the scan has several, the fit is then done slice by slice.
        background, fixed, start, weights, robust
            As in `fit_curve`.
        keep : bool
            Keep the fit in the store.

        Returns
        -------
        FitResult
            Or a FitTable over the other axes, where the scan has several.

        Raises
        ------
        ChoiceNeeded
            If the scan has several axes and none is named.
        NotFound
            If the scan, model, observable or axis is not there.
        FitError
            If it cannot be done as asked.
        """
        from nightfold.fits.kept import fit_scan
        from nightfold.fits.scanfit import FitRequest
        from nightfold.scans.scan import Scan

        chosen = self.scan(scan.id if isinstance(scan, Scan) else scan)
        request = FitRequest(
            model, observable, along, background, dict(fixed or {}), dict(start or {}), weights, robust
        )
        return fit_scan(self._session, chosen, request, keep=keep)

    def fits(self, scan: int | str | None = None) -> list[KeptFit]:
        """Return the fits kept, oldest first, of one scan or of all; replaced ones are left out."""
        from nightfold.fits.kept import list_fits

        return list_fits(self._session, None if scan is None else self.scan(scan))


def _listed(names: Sequence[str]) -> Sequence[str]:
    return (names,) if isinstance(names, str) else tuple(names)


def _own(records: Iterable[Mapping[str, Any]]) -> Iterator[Any]:
    """Yield the records; those of a generator as copies, for it may go on to change and reuse what it gave."""
    if isinstance(records, (Mapping, str, bytes)):  # it would be taken apart key by key
        raise TypeError(
            f"take: found one {type(records).__name__}, wanted an iterable of records such as [record]"
        )
    if isinstance(records, (list, tuple)):
        yield from records
    else:
        yield from map(copy.deepcopy, records)
