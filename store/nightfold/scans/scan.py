"""A scan as people use it: what was swept, and its shots as a Dataset or a table."""

from __future__ import annotations

from dataclasses import dataclass, field
from datetime import datetime
from functools import cached_property
from typing import TYPE_CHECKING

from nightfold.ledger.selecting import column_name, scan_key
from nightfold.scans.axes import Axis
from nightfold.scans.details import ScanDetails, read_details, read_shots
from nightfold.session import Session

if TYPE_CHECKING:
    import pandas as pd
    import xarray as xr


@dataclass(frozen=True, repr=False)
class Scan:
    """One scan; times are aware, in UTC. What was swept and read is looked up when first asked for.

    Attributes
    ----------
    id, round : int
    label : str or None
        None for a scan found by itself.
    machine, sequence, zone : str
    origin : {'label', 'declared', 'found'}
    shots, set_aside : int
        Shots in results, and those left out.
    first, last : datetime
    complete : bool
        Whether no more shots are expected.
    """

    id: int
    label: str | None
    round: int
    machine: str
    sequence: str
    zone: str
    origin: str
    shots: int
    set_aside: int
    first: datetime
    last: datetime
    complete: bool
    _session: Session = field(compare=False)
    _machine_id: int = field(compare=False)

    @property
    def key(self) -> str:
        """How the scan is named: ``label#round``, or its id."""
        return scan_key(self.id, self.label, self.round) or ""

    @cached_property
    def _details(self) -> ScanDetails:
        with self._session.reading() as connection:
            return read_details(connection, self.id, self._machine_id)

    @property
    def axes(self) -> tuple[Axis, ...]:
        """What was swept on purpose, in order."""
        return self._details.axes

    @property
    def followers(self) -> dict[str, str]:
        """Parameters that move along with an axis, and which."""
        return self._details.followers

    @property
    def observables(self) -> tuple[str, ...]:
        """Names of what was read, the machine card's main observable first."""
        return tuple(item.name for item in self._details.observables)

    @property
    def main_observable(self) -> str | None:
        """The observable to show first."""
        return self._details.main

    @property
    def units(self) -> dict[str, str]:
        """Unit of every axis, follower and observable."""
        return self._details.units

    def __repr__(self) -> str:
        axes = " x ".join(f"{axis.parameter} ({axis.points})" for axis in self.axes) or "no axis"
        return f"<Scan {self.key} of {self.sequence}: {axes}, {self.shots} shots>"

    def table(self, set_aside: bool = False) -> pd.DataFrame:
        """Return a frame with a row a shot, in time order.

        Columns are ``uid``, ``shot_id``, ``started`` (UTC), ``set_aside``, the axes and the parameters that follow one,
        and each observable with its ``<observable>_stderr``; units stand in ``attrs["units"]``.

        Parameters
        ----------
        set_aside : bool
            Include the shots set aside.
        """
        details = self._details
        with self._session.reading() as connection:
            return read_shots(connection, self.id, details, set_aside)

    def dataset(self, set_aside: bool = False, tolerance: float | None = None) -> xr.Dataset:
        """Return the scan on its axes.

        Parameters
        ----------
        set_aside : bool
            Include the shots set aside; they are holes otherwise.
        tolerance : float, optional
            Values of an axis closer together than this are one point, in the unit of the axis; default 1e-6 of its
            span.

        Returns
        -------
        Dataset
            Dimensions are the axes, ``repeat`` where a point has several shots, ``cloud`` where there are several;
            a sparse cloud of points has the one dimension ``shot``. Variables are the observables, their ``_stderr``,
            ``started``, ``shot_id``, ``uid`` and ``set_aside``; holes are NaN.
        """
        from nightfold.scans.grid import build_dataset

        dataset: xr.Dataset = build_dataset(
            self.table(set_aside),
            [column_name(axis.parameter) for axis in self.axes],
            co_moving={column_name(name): column_name(axis) for name, axis in self.followers.items()},
            observables=[column_name(name) for name in self.observables],
            units={column_name(name): unit for name, unit in self.units.items()},
            descriptions=self._details.descriptions,
            attrs={
                "scan": self.key,
                "machine": self.machine,
                "sequence": self.sequence,
                "time_zone": self.zone,
            },
            tolerance=tolerance,
        )
        return dataset
