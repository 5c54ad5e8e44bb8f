"""What people put right afterwards, always with a reason and always so that it can be undone."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from datetime import date
from typing import TYPE_CHECKING, Any

from sqlalchemy import Connection, Row, select

from nightfold import tables
from nightfold.errors import RequestError
from nightfold.faces.face import Face
from nightfold.ledger import correcting, notes, setting_aside, undoing
from nightfold.timestamps import now_us

if TYPE_CHECKING:
    from nightfold.merging.machines import MergeReport


class Mending(Face):
    """Putting right: shots set aside and put back, settings corrected."""

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

    def correct(
        self,
        uids: Sequence[str],
        settings: Mapping[str, Any],
        reason: str,
        *,
        by: str | None = None,
        scan: int | str | None = None,
        even_if_swept: bool = False,
        dry_run: bool = False,
    ) -> correcting.Corrected:
        """Correct settings of shots by appended corrections; return how many shots were changed.

        Parameters
        ----------
        uids : sequence of str
            The shots, by uid or the beginning of one.
        settings : mapping of parameter to value
            What was really set, as in a record: ``{"coil_current": {"value": 61.3, "unit": "A"}}``. Or by how much
            each shot is off: ``{"coil_current": {"times": 1.2}}``, ``{"coil_current": {"plus": 0.1, "unit": "A"}}``.
        reason : str
            Why; it stands in the shot's history.
        by : str, optional
            Who says so.
        scan : int or str, optional
            All shots of this scan too, those set aside included.
        even_if_swept : bool
            Give a parameter that moves in `scan` one value for all its shots, though its points are lost by that.
        dry_run : bool
            Look what would change, and change nothing.

        Returns
        -------
        Corrected
            How many shots were changed, an int; its `number` is what `undo_correction` takes, and `changes` tells of
            each setting what it was before and after.

        Raises
        ------
        NotFound
            If a shot, a scan or a parameter is not in the store.
        RecordError
            If a value cannot be taken for its parameter or is not finite, a shot has no such setting, or nothing would
            change.
        RequestError
            If the reason is empty, no setting or no shot is given, or a parameter that moves in `scan` would get one
            value.

        Notes
        -----
        All is done, or nothing. Shots that have the value already are left as they are. Scans follow, and fits that
        used the shots are stale. The record as it was first taken stays known. `undo_correction` undoes a correction.
        """
        from nightfold.scans.following import check_unswept
        from nightfold.scans.listing import find_scan

        whole = None if scan is None else find_scan(self._session, scan)
        if whole is not None and not even_if_swept:
            check_unswept(whole, settings)
        named = (uids,) if isinstance(uids, str) else tuple(uids)
        if not named and whole is None:
            raise RequestError("correct: found no shot, wanted uids or a scan")

        def work(connection: Connection) -> tuple[correcting.Corrected, list[Row[Any]]]:
            shots = list(setting_aside.find_shots(connection, named).values())
            if whole is not None:
                own = select(tables.shot).where(tables.shot.c.scan_id == whole.id)
                shots += connection.execute(own.order_by(tables.shot.c.started_us, tables.shot.c.id)).all()
            return correcting.correct_shots(connection, shots, settings, reason, by)

        return self._corrected(work, dry_run)

    def undo_correction(
        self, number: int, *, by: str | None = None, dry_run: bool = False
    ) -> correcting.Corrected:
        """Undo a correction by appended corrections, back to what each of its shots had; return how many were changed.

        Parameters
        ----------
        number : int
            That `correct` returned, and that `history` tells.
        by : str, optional
        dry_run : bool
            Look what would change, and change nothing.

        Raises
        ------
        NotFound
            If there is no such correction.
        RequestError
            If it is undone already, or one of its settings was corrected again since: undo that first.
        """
        return self._corrected(lambda connection: undoing.undo_correction(connection, number, by), dry_run)

    def _corrected(
        self, work: Callable[[Connection], tuple[correcting.Corrected, list[Row[Any]]]], dry_run: bool
    ) -> correcting.Corrected:
        """Correct in one transaction, or try it, and have the scans follow."""
        from nightfold.scans.following import follow_corrections

        with self._session.writing() as connection:
            done, changed = work(connection)
            if dry_run:
                connection.rollback()
                done.number = None
            else:
                follow_corrections(connection, changed)
        return done

    def merge_machines(
        self,
        old: str,
        into: str,
        *,
        reason: str,
        by: str | None = None,
        progress: Callable[[int], None] | None = None,
        dry_run: bool = False,
    ) -> MergeReport:
        """Make everything of one machine another's, and let its name mean that machine from now on.

        For a machine that was taken under a wrong name: shots, scans, notes, sensors of both are then of one, scans are
        folded again as if the shots had come late, and files taken before are known when they are taken again. A file
        is copied beside itself first, as ``NAME.before-merge``. It cannot be undone but by that copy.

        Parameters
        ----------
        old, into : str
            The name that goes, and the machine that stays: its card is in force.
        reason : str
            Why; needed.
        by : str, optional
        progress : callable, optional
            Called now and then with the number of shots folded again.
        dry_run : bool
            Do it all, report it, and undo it.

        Raises
        ------
        NotFound
            If a machine is not in the store.
        MergeError
            If a name has another unit or kind at the other machine, or anything else speaks against it; all of it is
            said, and nothing is changed.
        ValueError
            If there is no reason.
        StoreError
            If there is such a copy already.
        """
        from nightfold.merging.machines import merge_machines

        self._writer.forget()
        return merge_machines(
            self._session, old, into, reason=reason, by=by, progress=progress, dry_run=dry_run
        )

    def add_note(
        self,
        text: str,
        *,
        shot: str | None = None,
        scan: int | str | None = None,
        fit: int | None = None,
        night: date | str | None = None,
        machine: str | None = None,
        by: str | None = None,
    ) -> notes.Note:
        """Write a note on a shot, a scan, a fit or a night, and return it.

        Parameters
        ----------
        text : str
            May have several lines.
        shot, scan, fit, night
            What it is about, exactly one: uid or its beginning, key of a scan, id of a fit, date of the evening.
        machine : str, optional
            Whose night, where there are several machines.
        by : str, optional

        Raises
        ------
        NotFound, ChoiceNeeded
            If that is not there, or the machine must be named.
        RequestError
            If the text is empty, or there is not exactly one subject.
        """
        from nightfold.scans.listing import find_scan

        scan_id = None if scan is None else find_scan(self._session, scan).id
        with self._session.writing() as connection:
            subject = notes.find_subject(
                connection, shot=shot, scan_id=scan_id, fit=fit, night=night, machine=machine
            )
            if subject is None:
                raise RequestError("note: found no subject, wanted one of shot, scan, fit, night")
            return notes.add_note(connection, subject, text, by, now_us())
