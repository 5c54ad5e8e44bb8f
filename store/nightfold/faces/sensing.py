"""Reading sensors."""

from __future__ import annotations

from datetime import datetime
from typing import TYPE_CHECKING

from nightfold.faces.face import Face

if TYPE_CHECKING:
    import pandas as pd


class Sensing(Face):
    """Readings that belong to no shot."""

    def sensors(self, machine: str | None = None) -> pd.DataFrame:
        """Return the sensors: machine, name, unit, readings (how many), first, last (UTC), newest (the last value).

        Raises
        ------
        NotFound
            If there is no such machine.
        """
        from nightfold.sensors.reading import list_sensors

        with self._session.reading() as connection:
            return list_sensors(connection, machine)

    def sensor(
        self,
        name: str,
        since: datetime | str | None = None,
        until: datetime | str | None = None,
        *,
        machine: str | None = None,
    ) -> pd.DataFrame:
        """Return the readings of a sensor in order of time: at (UTC), value; its unit in ``attrs["units"]``.

        Parameters
        ----------
        name : str
        since, until : datetime or str, optional
            `since` is included, `until` is not; without an offset they are local to the machine.
        machine : str, optional
            Needed where several machines have a sensor of that name.

        Raises
        ------
        NotFound
            If there is no such sensor, or something is no time.
        ChoiceNeeded
            If several machines have it.
        """
        from nightfold.sensors.reading import as_frame, find_sensor, read_span, span_us

        with self._session.reading() as connection:
            found = find_sensor(connection, name, machine)
            frame = as_frame(read_span(connection, found.id, *span_us(found, since, until)))
        frame.attrs |= {"machine": found.machine, "units": {"value": found.unit}}
        return frame

    def sensor_bins(
        self,
        name: str,
        since: datetime | str | None = None,
        until: datetime | str | None = None,
        *,
        machine: str | None = None,
        bins: int = 100,
    ) -> pd.DataFrame:
        """Return a span of a sensor in at most so many bins: at (UTC, begin), readings, low, mean, high.

        Their width, ``attrs["width_s"]``, is a round one; bins of an hour and more are whole hours, read without
        unpacking them. Bins without readings are left out; low, mean and high are of the finite readings.

        Raises
        ------
        NotFound, ChoiceNeeded
            As `sensor`.
        ValueError
            If `bins` is less than 1.
        """
        from nightfold.sensors.bins import bins_frame, read_bins
        from nightfold.sensors.reading import find_sensor, span_us

        with self._session.reading() as connection:
            found = find_sensor(connection, name, machine)
            read = read_bins(connection, found.id, *span_us(found, since, until), bins)
        frame = bins_frame(read)
        frame.attrs |= {"machine": found.machine, "units": dict.fromkeys(("low", "mean", "high"), found.unit)}
        return frame
