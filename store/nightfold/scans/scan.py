"""A scan as people use it: what was swept, and its shots as a Dataset or a table."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from datetime import datetime
from functools import cached_property
from math import prod
from typing import TYPE_CHECKING

from nightfold.card import without_cloud
from nightfold.errors import NotFound
from nightfold.ledger.columns import Named
from nightfold.ledger.selecting import Selection, column_name, listed, near_miss, scan_key
from nightfold.scans.arrangements import Arrangement, arrangements_of
from nightfold.scans.axes import Axis
from nightfold.scans.details import ScanDetails, card_of, read_details, read_shots
from nightfold.scans.references import (
    WITHIN,
    Comparison,
    check_relative,
    describe_levels,
    read_within,
    relate,
)
from nightfold.sensors.alongside import add_sensors
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
    arranged : tuple of int
        Numbers of the joins and splits that made it what it is.
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
    arranged: tuple[int, ...]
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
    def scattered(self) -> bool:
        """Whether the points fill so little of a grid of several axes that a dataset has the one dimension ``shot``."""
        from nightfold.scans.layout import SPARSE

        points = [axis.points for axis in self.axes]
        return len(points) > 1 and prod(points) > SPARSE * max(self.shots, 1)

    @property
    def order(self) -> dict[str, str]:
        """Whether the points of each axis were taken in order: 'rising', 'falling' or 'mixed'.

        A drift in time can look like a function of an axis that is not mixed. Axes of text or truth, and of fewer than
        3 points, are left out.
        """
        return self._details.order

    @cached_property
    def arrangements(self) -> tuple[Arrangement, ...]:
        """The joins and splits that made the scan what it is, oldest first, with who, when and why."""
        with self._session.reading() as connection:
            return arrangements_of(connection, self.id)

    @property
    def followers(self) -> dict[str, str]:
        """Parameters that move along with an axis, and which."""
        return self._details.followers

    @property
    def mixed(self) -> dict[str, tuple[str, ...]]:
        """Derived parameters that depend on several axes, and on which."""
        return self._details.mixed

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

    def table(
        self,
        set_aside: bool = False,
        *,
        observables: Sequence[str] | None = None,
        relative_to: str | None = None,
        reference_within: str | float = WITHIN,
        sensors: Sequence[str] = (),
        align: str = "nearest",
    ) -> pd.DataFrame:
        """Return a frame with a row a shot, in time order.

        Columns are ``uid``, ``shot_id``, ``started`` (UTC), ``set_aside``, the axes and the parameters that follow one,
        and each observable with its ``<observable>_stderr``; units stand in ``attrs["units"]``.

        Parameters
        ----------
        set_aside : bool
            Include the shots set aside.
        observables : sequence of str, optional
            Only these; the name without a cloud stands for all clouds, where there are only those.
        relative_to : {'reference'}, optional
            Divide each observable by what the reference shots say at that moment, as `level_at` and `ratio_of` of
            `nightfold.scans.relative` do; that stands beside it as ``<observable>_reference``.
        reference_within : str or float
            How far a reference shot may be from a shot: a text with a unit, or seconds.
        sensors : sequence of str
            A further column each, of what these sensors showed (docs/sensors.md).
        align : {'nearest', 'mean'}
            The reading nearest to the start of each shot, or the mean over the shot.

        Raises
        ------
        NotFound
            If no shot of the scan has an observable asked for, or there is no such sensor.
        NoReference
            If reference shots are too far, lack the observable, or read what cannot be divided by.
        """
        details = self._chosen(observables)
        with self._session.reading() as connection:
            table = read_shots(connection, self.id, details, set_aside)
            if relative_to is not None:
                check_relative(relative_to)
                wanted = Comparison(
                    self.key,
                    self._machine_id,
                    self.sequence,
                    details.observables,
                    read_within(reference_within),
                )
                table = relate(connection, table, wanted)
            if sensors:
                chosen = Selection(machine=self.machine, scan_id=self.id, set_aside=set_aside)
                add_sensors(connection, table, chosen, listed(sensors), align)
            return table

    def _chosen(self, names: Sequence[str] | None) -> ScanDetails:
        """Return the details with these observables only."""
        if names is None:
            return self._details
        known = {item.name: item for item in self._details.observables}
        wanted = [names] if isinstance(names, str) else list(dict.fromkeys(names))
        found: dict[str, Named] = {}
        for name in wanted:
            clouds = [name] if name in known else [each for each in known if without_cloud(each) == name]
            if not clouds:
                raise NotFound(f"scan {self.key}: no observable {name!r}; {near_miss(name, known)}")
            found |= {each: known[each] for each in clouds}
        return replace(self._details, observables=tuple(found.values()))

    def _described(self, sensors: Sequence[str]) -> dict[str, str]:
        """Return what the machine card says of sensors, by their column."""
        if not sensors:
            return {}
        with self._session.reading() as connection:
            card = card_of(connection, self._machine_id)
        entries = {name: card.sensors.get(name) for name in listed(sensors)} if card is not None else {}
        return {
            column_name(name): entry.description
            for name, entry in entries.items()
            if entry and entry.description
        }

    def dataset(
        self,
        set_aside: bool = False,
        tolerance: float | None = None,
        *,
        observables: Sequence[str] | None = None,
        relative_to: str | None = None,
        reference_within: str | float = WITHIN,
        sensors: Sequence[str] = (),
        align: str = "nearest",
    ) -> xr.Dataset:
        """Return the scan on its axes.

        Parameters
        ----------
        set_aside : bool
            Include the shots set aside; they are holes otherwise.
        tolerance : float, optional
            Values of an axis closer together than this are one point, in the unit of the axis; default 1e-6 of its
            span.
        observables, relative_to, reference_within, sensors, align
            As in `table`.

        Returns
        -------
        Dataset
            Dimensions are the axes, ``repeat`` where a point has several shots, ``cloud`` where there are several;
            a sparse cloud of points has the one dimension ``shot``. Variables are the observables, their ``_stderr``,
            ``started``, ``shot_id``, ``uid`` and ``set_aside``; holes are NaN.
        """
        from nightfold.scans.grid import build_dataset
        from nightfold.scans.layout import free_name

        table = self.table(
            set_aside,
            observables=observables,
            relative_to=relative_to,
            reference_within=reference_within,
            sensors=sensors,
            align=align,
        )
        read = [item.name for item in self._chosen(observables).observables]
        descriptions = self._details.descriptions | self._described(sensors)
        if relative_to is not None:
            read, descriptions = describe_levels(table.attrs["levels"], descriptions)
        dataset: xr.Dataset = build_dataset(
            table,
            [column_name(axis.parameter) for axis in self.axes],
            co_moving={column_name(name): column_name(axis) for name, axis in self.followers.items()},
            mixed={
                column_name(name): [column_name(axis) for axis in own] for name, own in self.mixed.items()
            },
            observables=[column_name(name) for name in read],
            sensors=[column_name(name) for name in listed(sensors)],
            units={column_name(name): unit for name, unit in table.attrs["units"].items()},
            descriptions=descriptions,
            attrs={
                "scan": self.key,
                "machine": self.machine,
                "sequence": self.sequence,
                "time_zone": self.zone,
                **table.attrs.get("relative", {}),
            },
            tolerance=tolerance,
        )
        for axis, order in self.order.items():
            dataset[free_name(column_name(axis))].attrs["order_taken"] = order
        return dataset
