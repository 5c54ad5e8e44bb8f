"""Scans and fits."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

from nightfold.faces.face import Face

if TYPE_CHECKING:
    from nightfold.fits.kept import KeptFit
    from nightfold.fits.many import FitTable
    from nightfold.fits.result import FitResult
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

    def fits(self, scan: int | str | None = None) -> list[KeptFit]:
        """Return the fits kept, oldest first, of one scan or of all; replaced ones are left out."""
        from nightfold.fits.kept import list_fits

        return list_fits(self._session, None if scan is None else self.scan(scan))
