"""Scans and fits."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from datetime import datetime
from typing import TYPE_CHECKING, Any

from nightfold.faces.face import Face

if TYPE_CHECKING:
    import pandas as pd

    from nightfold.fits.again import Refit
    from nightfold.fits.comparison import Comparison
    from nightfold.fits.keptfit import KeptFit
    from nightfold.fits.many import FitTable
    from nightfold.fits.result import FitResult
    from nightfold.scans.arrangements import Arrangement
    from nightfold.scans.scan import Scan


class Scanning(Face):
    """Scans, and fits of them."""

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

    def join_scans(
        self, keys: Iterable[int | str], *, reason: str | None = None, by: str | None = None
    ) -> Scan:
        """Make one scan of several of a sequence, and return it: the earliest of them, with all their shots.

        Shots that come later do not change it, but those of its label that go on with it. See `undo_arrangement`.

        Raises
        ------
        NotFound
            If there is no such scan, or it has no shots.
        ChoiceNeeded
            If these are not two scans or more of one sequence.
        """
        from nightfold.scans.arranging import join_scans

        with self._session.writing() as connection:
            scan_id = join_scans(connection, list(keys), reason, by)
        return self.scan(scan_id)

    def split_scan(
        self,
        key: int | str,
        *,
        at: int | str | datetime,
        reason: str | None = None,
        by: str | None = None,
    ) -> tuple[Scan, Scan]:
        """Part a scan in two, in order of time, and return both; the first keeps id, label and round.

        Parameters
        ----------
        key : int or str
        at : int, str or datetime
            After so many shots, those set aside too; or the first shot of the second part, by its uid or the beginning
            of it; or the time from which on shots belong to the second part, without an offset local to the machine.
        reason, by : str, optional

        Raises
        ------
        NotFound
            If there is no such scan, or no such place in it.
        ChoiceNeeded
            If one of the parts would have no shot.
        """
        from nightfold.scans.arranging import split_scan

        with self._session.writing() as connection:
            first, second = split_scan(connection, key, at, reason, by)
        return self.scan(first), self.scan(second)

    def arrangements(self) -> pd.DataFrame:
        """Return what was joined and split by hand, a row each, oldest first.

        Columns are ``number``, ``kind``, ``at`` (UTC), ``by``, ``reason``, ``undone``, ``undone_by``, ``machine``,
        ``sequence``, ``before`` and ``after`` (keys of the scans) and ``shots``.
        """
        from nightfold.scans.arrangements import arrangement_table, read_arrangements

        with self._session.reading() as connection:
            return arrangement_table(read_arrangements(connection))

    def undo_arrangement(self, number: int, *, by: str | None = None) -> Arrangement:
        """Bring the shots that were joined or split back into the scans they came from, and return what was undone.

        Those have their ids, labels, rounds and fits again. Shots that came since find their place as if nothing had
        been arranged.

        Raises
        ------
        NotFound
            If there is no arrangement of that number.
        ChoiceNeeded
            If it was undone before, or a later one has moved the same shots.
        """
        from nightfold.scans.arranging import undo_arrangement

        with self._session.writing() as connection:
            return undo_arrangement(connection, number, by)

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
        relative_to: str | None = None,
        reference_within: str | float = "30 min",
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
        relative_to, reference_within
            As in `Scan.table`: fit the observable relative to reference shots.

        Returns
        -------
        FitResult
            Or a FitTable over the other axes, where the scan has several.

        Raises
        ------
        ChoiceNeeded
            If the scan has several axes and none is named.
        NotFound
            If the scan, model, observable or axis is not there, or the reference shots are not (`NoReference`).
        FitError
            If it cannot be done as asked.
        """
        from nightfold.fits.kept import fit_scan
        from nightfold.fits.scanfit import FitRequest
        from nightfold.scans.scan import Scan

        chosen = self.scan(scan.id if isinstance(scan, Scan) else scan)
        request = FitRequest(
            model,
            observable,
            along,
            background,
            dict(fixed or {}),
            dict(start or {}),
            weights,
            robust,
            relative_to,
            reference_within,
        )
        return fit_scan(self._session, chosen, request, keep=keep)

    def compare(
        self,
        scan: Scan | int | str,
        models: Sequence[Any],
        *,
        observable: str,
        estimate: str | None = None,
        **options: Any,
    ) -> Comparison | list[Comparison]:
        """Fit several models to a scan and return them side by side: weights by AICc, what each says, the average.

        Parameters
        ----------
        scan, observable
            As in `fit`.
        models : sequence of str, Model or lmfit.Model
            Two or more.
        estimate : str, optional
            What to compare; by default the position, rate or time that the first model is about.
        **options
            All others of `fit`.

        Returns
        -------
        Comparison
            Or a list of them, one a slice, where the scan has several axes; formulas are given in `compare_fits` of
            `nightfold.fits.comparison`.

        Raises
        ------
        ChoiceNeeded, NotFound, FitError
            As in `fit`; also if a model does not have the estimate, or there is one model only.
        """
        from nightfold.fits.comparison import compare_outcomes

        outcomes = [self.fit(scan, model, observable=observable, **options) for model in models]
        return compare_outcomes(outcomes, estimate)

    def fits(self, scan: int | str | None = None, *, shots: Sequence[str] | None = None) -> list[KeptFit]:
        """Return the fits kept, oldest first; replaced ones are left out.

        Parameters
        ----------
        scan : int or str, optional
            Only fits of this scan.
        shots : sequence of str, optional
            Only fits that used one of these shots, or whose scan has one of them now.

        Raises
        ------
        NotFound
            If the scan or a shot is not in the store.
        """
        from nightfold.fits.kept import list_fits

        return list_fits(self._session, None if scan is None else self.scan(scan), shots)

    def refit(self, scan: int | str | None = None, *, stale_only: bool = True) -> list[Refit]:
        """Do kept fits again as they were done, where their data have changed since.

        Parameters
        ----------
        scan : int or str, optional
            Only fits of this scan.
        stale_only : bool
            False for all of them.

        Returns
        -------
        list of Refit
            One a fit, and one a slice that is new: ``before``, ``after``, or ``left`` with the reason. What cannot be
            done again is left as it was: a model of one's own, a scan that is gone, a fit that fails now.

        Raises
        ------
        NotFound
            If the scan is not in the store.
        """
        from nightfold.fits.again import refit

        return refit(self._session, None if scan is None else self.scan(scan), stale_only=stale_only)
