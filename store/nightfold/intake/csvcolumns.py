"""What the columns of a CSV file mean: options, and the header read in their light."""

from __future__ import annotations

import math
import re
from collections.abc import Collection, Iterable, Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from shlex import quote
from typing import TYPE_CHECKING, Literal

from nightfold.card import MachineCard, without_cloud
from nightfold.errors import ChoiceNeeded, RecordError, UnitError
from nightfold.records import clean_name
from nightfold.timestamps import from_us, parse_moment
from nightfold.units import parse_unit

if TYPE_CHECKING:
    from zoneinfo import ZoneInfo

Role = Literal[
    "parameter", "observable", "stderr", "derived",
    "machine", "sequence", "scan", "started", "uid", "reference", "failed", "note",
]  # fmt: skip
_SPECIAL: tuple[Role, ...] = ("machine", "sequence", "scan", "reference", "failed", "note")
_EXPORT_ONLY = frozenset(("shot_id", "set_aside"))
_WITH_UNIT = re.compile(r"(.*\S)\s+\[([^\[\]]*)\]|\[([^\[\]]*)\]")
_STDERR = re.compile(r"(.*\S)(?:_|\s+)stderr")


@dataclass(frozen=True, slots=True, kw_only=True)
class CsvColumns:
    r"""How to read a CSV file.

    Attributes
    ----------
    machine, sequence, scan : str or None
        Taken for every row that does not say it in a column of that name; without it, the card's machine.
    started, uid : str
        Names of the columns with the time and with the unique name of a shot.
    swept : tuple of str
        Parameters varied on purpose.
    parameters, observables : tuple of str, or "rest"
        Columns that are settings, and columns that are readings, beyond those in the card. One of the two
        may be ``"rest"``: every column not spoken for.
    delimiter : str or None
        ``","``, ``";"``, ``"\t"``, or ``" "`` for any run of spaces and tabs; None finds out.
    names : tuple of str
        Column names, for a file without a header line.
    started_at : str, datetime or None
        For a file without times: when the first row was taken, with an offset from UTC unless the card has
        `naive_times`.
    cycle_s : float
        For a file without times: seconds from one row to the next.
    """

    machine: str | None = None
    sequence: str | None = None
    scan: str | None = None
    started: str = "started"
    uid: str = "uid"
    swept: tuple[str, ...] = ()
    parameters: tuple[str, ...] | Literal["rest"] = ()
    observables: tuple[str, ...] | Literal["rest"] = ()
    delimiter: str | None = None
    names: tuple[str, ...] = ()
    started_at: str | datetime | None = None
    cycle_s: float = 10.0

    def first_moment(self, zone: ZoneInfo | None = None) -> datetime | None:
        """Return `started_at` in UTC.

        Parameters
        ----------
        zone : ZoneInfo, optional
            Where a time without an offset belongs; without it such a time is refused.

        Raises
        ------
        RecordError
            If it is no ISO 8601 time with an offset, or `cycle_s` is no time.
        """
        if self.started_at is None:
            return None
        if not 0 < self.cycle_s < math.inf:
            raise RecordError("cycle_s", str(self.cycle_s), "seconds between rows, more than 0")
        wanted = "an ISO 8601 time with an offset, such as 2026-10-05T21:00:00+02:00"
        moment = self.started_at
        if isinstance(moment, str):
            try:
                moment = datetime.fromisoformat(moment.strip())
            except ValueError as error:
                raise RecordError("started_at", repr(self.started_at), wanted) from error
        if moment.tzinfo is None and zone is None:
            raise RecordError(
                "started_at",
                f"{moment.isoformat()}, without an offset",
                f"{wanted}; or naive_times = true in the card",
            )
        try:
            return from_us(parse_moment(moment, zone))
        except ValueError as problem:
            raise RecordError("started_at", moment.isoformat(), str(problem)) from None


@dataclass(frozen=True, slots=True)
class Column:
    """One column: its name, the unit of its header, and what it is.

    ``is_text`` says that its cells are text even where they look like numbers.
    """

    name: str
    unit: str | None
    role: Role
    is_text: bool = False


def read_header(
    cells: Sequence[str],
    options: CsvColumns,
    card: MachineCard | None,
    source: str,
    known: Mapping[str, Role] | None = None,
) -> tuple[Column, ...]:
    """Return the columns behind a header line; `known` are those of the store, for what the card does not name.

    Raises
    ------
    RecordError
        If a name is empty or given twice, or a unit is not known.
    ChoiceNeeded
        If it is not said what a column is, or which machine, sequence or times the rows belong to.
    """
    headings = [split_heading(cell, place) for place, cell in enumerate(cells, start=1)]
    names = [name for name, _ in headings]
    for name in names:
        if names.count(name) > 1:
            raise RecordError(name, "two columns of this name", "each name once")
    roles = _Roles(options, card, names, known or {})
    columns = tuple(_column(name, unit, roles, card) for name, unit in headings)
    _check_sensors(columns, options, source)
    _check_unassigned([name for name in names if roles.of(name) is None], options, source)
    _check_stated([*names, *(card.derived if card is not None else ())], options, source)
    _check_whole(columns, options, card, source)
    _check_stderr(columns)
    return columns


def split_name(heading: str) -> tuple[str, str | None]:
    """Return name and unit of a heading such as ``coil_current [A]``; without the space it names a cloud."""
    match = _WITH_UNIT.fullmatch(heading.strip())
    if match is None or match[1] is None:
        return heading.strip(), None
    return match[1], match[2].strip()


def split_heading(cell: str, place: int) -> tuple[str, str | None]:
    """Return name and unit of a header cell, both checked."""
    text, unit = split_name(cell)
    try:
        name = clean_name(text)
    except ValueError as error:
        raise RecordError(f"column {place}", repr(cell), f"{error} in the header") from error
    if unit is None:
        return name, None
    try:
        return name, parse_unit(unit)
    except UnitError as error:
        raise RecordError(name, f"unit {unit!r}", "a unit that is known, such as [A], [ms], [nK]") from error


def is_exported(names: Collection[str]) -> bool:
    """Return whether a table is an export of a scan: its rows hold only what varied in it, of shots with a uid."""
    return _EXPORT_ONLY.issubset(names) and "uid" in names


class _Roles:
    """Finds the role of a column by its name: options first, then the reserved names, then the card."""

    def __init__(
        self,
        options: CsvColumns,
        card: MachineCard | None,
        names: Sequence[str],
        stored: Mapping[str, Role],
    ) -> None:
        self._names, self._card, self._stored = frozenset(names), card, stored
        self._parameters = {*_listed(options.parameters), *_listed(options.swept)}
        self._observables = set(_listed(options.observables))
        self._started = split_name(options.started)[0]
        self._uid = split_name(options.uid)[0]
        self._rest: Role | None = None
        if options.parameters == "rest":
            self._rest = "parameter"
        elif options.observables == "rest":
            self._rest = "observable"

    def of(self, name: str) -> Role | None:
        """Return the role of a column, or None where nothing says it."""
        if self._is_derived(name):
            return "derived"
        if name in self._parameters:
            return "parameter"
        if name in self._observables:
            return "observable"
        if name == self._started:
            return "started"
        if name == self._uid:
            return "uid"
        for role in _SPECIAL:
            if name == role:
                return role
        if known := self._by_card(name) or self._stored.get(name):
            return known
        if is_exported(self._names) and self._is_export_only(name):
            return "derived"
        if _STDERR.fullmatch(name):
            return "stderr" if self.belongs_to(name) else None
        return self._rest

    def belongs_to(self, name: str) -> str | None:
        """Return the observable whose standard uncertainty a column of that name holds."""
        match = _STDERR.fullmatch(name)
        return match[1] if match and match[1] in self._names else None

    def _is_export_only(self, name: str) -> bool:
        """Whether an export writes a column for people, which is not taken."""
        match = _STDERR.fullmatch(name)
        base = without_cloud(match[1] if match else name)
        return name in _EXPORT_ONLY or base.endswith("_relative")

    def _is_derived(self, name: str) -> bool:
        """Whether the card derives a column: it is not taken, so that exported tables can be taken again."""
        if self._card is None:
            return False
        match = _STDERR.fullmatch(name)
        return name in self._card.derived or (match is not None and match[1] in self._card.derived)

    def _by_card(self, name: str) -> Role | None:
        if self._card is None:
            return None
        if name in self._card.parameters:
            return "parameter"
        return "observable" if self._card.observable(name) else None


def _column(name: str, unit: str | None, roles: _Roles, card: MachineCard | None) -> Column:
    """Return the column of one heading."""
    role = roles.of(name) or "parameter"
    if role == "stderr":
        return Column(roles.belongs_to(name) or name, unit, role)
    entry = card.parameters.get(name) if card and role == "parameter" else None
    return Column(name, unit, role, is_text=entry is not None and entry.kind == "text")


def _listed(names: Iterable[str] | str) -> list[str]:
    """Return the names stated in an option, without units; none for ``"rest"``."""
    return [] if isinstance(names, str) else [split_name(name)[0] for name in names]


def _check_sensors(columns: tuple[Column, ...], options: CsvColumns, source: str) -> None:
    """Refuse what looks like readings of sensors: no times of shots, but a column ``at``."""
    no_times = options.started_at is None and all(column.role != "started" for column in columns)
    if no_times and any(column.name == "at" for column in columns):
        raise ChoiceNeeded(
            f"{source}: a column 'at' and none {options.started!r}: if these are readings of sensors, take them with "
            "--sensors (take_sensor_file); if they are shots, say --started at"
        )


def _check_unassigned(unknown: list[str], options: CsvColumns, source: str) -> None:
    """Refuse a file with columns nothing is known about."""
    if not unknown:
        return
    listed = ", ".join(repr(name) for name in unknown[:6]) + (" …" if len(unknown) > 6 else "")
    advice = _example(unknown, swept_known=bool(options.swept))
    bare = next((name for name in unknown if without_cloud(name) != name), None)
    if bare is not None:
        advice += f"; if the bracket of {bare!r} holds a unit, put a space before it"
    elif len(unknown) == 1 and len(unknown[0].split()) > 1 and options.delimiter is None:
        advice += "; if the columns are parted by spaces, say so with the delimiter"
    raise ChoiceNeeded(
        f"{source}: neither the card nor the options say what these columns are: {listed}; {advice}"
    )


def _example(unknown: list[str], *, swept_known: bool) -> str:
    """Return how to say what columns are, with the options of `take` and the columns themselves."""
    if swept_known or len(unknown) == 1:
        names = quote(",".join(unknown))
        swept = "" if swept_known else f"--swept {names}, "
        return f"say {swept}--observables {names}, or --parameters {names} for settings that rested"
    swept, read = quote(unknown[0]), quote(",".join(unknown[1:]))
    return f"say for example --swept {swept} --observables {read}; --parameters names settings that rested"


def _check_stated(names: Sequence[str], options: CsvColumns, source: str) -> None:
    """Refuse options that name columns which are not there."""
    for option in ("parameters", "observables", "swept"):
        for name in _listed(getattr(options, option)):
            if name not in names:
                raise ChoiceNeeded(
                    f"{source}: {option} names {name!r}, but the columns are {', '.join(names)}; "
                    "name one of them"
                )
    if options.parameters == "rest" and options.observables == "rest":
        raise ChoiceNeeded(f"{source}: parameters and observables cannot both be the rest; name one of them")


def _check_whole(
    columns: tuple[Column, ...], options: CsvColumns, card: MachineCard | None, source: str
) -> None:
    """Refuse a file of which machine, sequence or times are not said, or the times are said twice."""
    roles = {column.role for column in columns}
    if "machine" not in roles and options.machine is None and card is None:
        raise ChoiceNeeded(f"{source}: no column 'machine'; state the machine")
    if "sequence" not in roles and options.sequence is None:
        raise ChoiceNeeded(f"{source}: no column 'sequence'; state the sequence")
    if "started" not in roles and options.started_at is None:
        raise ChoiceNeeded(
            f"{source}: no column {options.started!r}; name the column with the time of the shot, "
            "or state when the first row was taken (started_at)"
        )
    if "started" in roles and options.started_at is not None:
        raise ChoiceNeeded(
            f"{source}: times stand in the column {options.started!r}, and started_at is stated; keep one"
        )


def _check_stderr(columns: tuple[Column, ...]) -> None:
    """Refuse a standard uncertainty that belongs to no observable, is there twice, or has another unit."""
    values = {column.name: column for column in columns if column.role in ("parameter", "observable")}
    seen: set[str] = set()
    for column in columns:
        if column.role != "stderr":
            continue
        value = values.get(column.name)
        if value is None or value.role != "observable":
            raise RecordError(
                f"{column.name}_stderr",
                "a standard uncertainty of a column that is no observable",
                "an observable",
            )
        if column.name in seen:
            raise RecordError(f"{column.name}_stderr", "two columns of it", "one standard uncertainty")
        seen.add(column.name)
        if column.unit is not None and column.unit != value.unit:
            found = f"unit {column.unit!r}, while {value.name} has {value.unit!r}"
            raise RecordError(f"{column.name}_stderr", found, "the same unit in both headings")
