"""The machine card: a TOML file that says what a machine's parameters and observables are."""

from __future__ import annotations

import hashlib
import json
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import time
from pathlib import Path
from typing import TYPE_CHECKING

from nightfold.cardkeys import TIME_ZONE, Kind, Table
from nightfold.errors import CardError

if TYPE_CHECKING:
    from zoneinfo import ZoneInfo

    from nightfold.formulas.definitions import Derived

DAY_S = 86400.0


@dataclass(frozen=True, slots=True)
class NamedQuantity:
    """What the card says about one parameter or observable.

    Attributes
    ----------
    name : str
    unit : str or None
        None until stated; the empty text for a pure number.
    low, high : float or None
        Plausible range; a value outside is never refused.
    description : str
    kind : {'number', 'text', 'truth'} or None
        None until a record shows it.
    """

    name: str
    unit: str | None = None
    low: float | None = None
    high: float | None = None
    description: str = ""
    kind: Kind | None = None

    def plausible(self, value: float) -> bool:
        """Return whether a value lies in the plausible range; nan does not, and without a range all do."""
        if self.low is None or self.high is None:
            return True
        return self.low <= value <= self.high


@dataclass(frozen=True, slots=True)
class DerivedQuantity(NamedQuantity):
    """What the card says about a quantity that is computed of others.

    Attributes
    ----------
    expression : str
        Of parameters, observables and other derived quantities.
    unit : str or None
        None for the one that the expression has.
    """

    expression: str = ""


@dataclass(frozen=True, slots=True)
class MachineCard:
    """A machine as its card describes it.

    Attributes
    ----------
    machine : str
    species : tuple of str
        Isotopes, such as ``39K``.
    zone : str
        IANA time zone in which times are shown and nights are cut.
    night_boundary : datetime.time
        Local time at which one night ends and the next begins.
    rejoin_within_s : float
        A scan label used again within this many seconds goes on with its round; later it opens a new one.
    naive_times : bool
        Whether times without an offset are read as local times of `zone`.
    parameters, observables, sensors : mapping of str to NamedQuantity
    derived : mapping of str to DerivedQuantity
        Quantities computed of those, as the card states them; `settle_derived` makes formulas of them.
    main_observable : str or None
        The observable shown when none is named.
    toml : str
        The card as read.
    """

    machine: str
    species: tuple[str, ...] = ()
    zone: str = "UTC"
    night_boundary: time = time(12)
    rejoin_within_s: float = DAY_S
    naive_times: bool = False
    parameters: Mapping[str, NamedQuantity] = field(default_factory=dict, hash=False)
    observables: Mapping[str, NamedQuantity] = field(default_factory=dict, hash=False)
    sensors: Mapping[str, NamedQuantity] = field(default_factory=dict, hash=False)
    derived: Mapping[str, DerivedQuantity] = field(default_factory=dict, hash=False)
    main_observable: str | None = None
    toml: str = ""

    @property
    def naive_zone(self) -> ZoneInfo | None:
        """The zone in which times without an offset are read; None where they are refused."""
        from nightfold.timestamps import find_zone

        return find_zone(self.zone) if self.naive_times else None

    @property
    def digest(self) -> str:
        """SHA-256 of the card as read, in hexadecimal."""
        return hashlib.sha256(self.toml.encode("utf-8")).hexdigest()

    def observable(self, name: str) -> NamedQuantity | None:
        """Return the entry of an observable; ``atom_number[up]`` shares that of ``atom_number``."""
        return self.observables.get(name) or self.observables.get(without_cloud(name))

    def description(self, name: str) -> str:
        """Return what the card says for people about a parameter, an observable or a derived quantity."""
        entry = self.parameters.get(name) or self.derived.get(name) or self.observable(name)
        return entry.description if entry else ""


def without_cloud(name: str) -> str:
    """Return the name of an observable without its cloud: ``atom_number`` of ``atom_number[up]``."""
    return split_cloud(name)[0]


def split_cloud(name: str) -> tuple[str, str | None]:
    """Return the name of an observable and its cloud: ``atom_number`` and ``up``; None where there is none.

    The cloud is what stands in the last pair of brackets: any text without brackets.
    """
    base, bracket, rest = name.rpartition("[")
    if not (base and bracket and rest.endswith("]")) or "]" in rest[:-1] or rest == "]":
        return name, None
    return base, rest[:-1]


def read_card(path: str | Path) -> MachineCard:
    """Return the card in a TOML file.

    Raises
    ------
    CardError
        If the file cannot be read, is no TOML, or a key is unknown, missing or wrong; the message names file,
        line, key, value found and value wanted.
    """
    try:
        data = Path(path).read_bytes()
    except OSError as error:
        reason = error.strerror or str(error)
        raise CardError(f"{path}: the card cannot be read ({reason}); wanted a TOML file") from error
    try:
        text = data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = data.count(b"\n", 0, error.start) + 1
        found = f"byte 0x{data[error.start]:02x}"
        raise CardError(f"{path}:{line}: found {found}, wanted UTF-8 text; save the card as UTF-8") from error
    return parse_card(text, source=str(path))


def parse_card(text: str, *, source: str = "card", checked: bool = False) -> MachineCard:
    """Return the card written in a TOML text; `source` names it in messages.

    A card that was `checked` before, one in the store, is spared the check of its expressions.

    Raises
    ------
    CardError
        As `read_card`.
    """
    try:
        content = tomllib.loads(text)
    except (tomllib.TOMLDecodeError, RecursionError) as error:
        raise CardError(f"{source}: this is no TOML: {error}") from error
    table = Table(source, text, content)
    table.check_keys(
        *("machine", "species", "zone", "night_boundary", "rejoin_within", "naive_times", "main_observable"),
        *("parameters", "observables", "derived", "sensors"),
    )
    machine = table.name("machine")
    if machine is None:
        raise table.error("machine", "nothing", 'the name of the machine: machine = "heron"')
    parameters = {name: _parameter(name, entry) for name, entry in table.entries("parameters")}
    observables = {name: _observable(name, entry) for name, entry in table.entries("observables")}
    for name in parameters.keys() & observables.keys():
        raise table.error(("observables", name), "a name that is also a parameter", "one or the other")
    _check_clouds(table, observables)
    derived = {name: _derived(name, entry) for name, entry in table.entries("derived")}
    for name in derived.keys() & (parameters.keys() | observables.keys()):
        kind = "a parameter" if name in parameters else "an observable"
        raise table.error(("derived", name), f"a name that is also {kind}", "one or the other")
    sensors = {name: _observable(name, entry) for name, entry in table.entries("sensors")}
    for name in sensors.keys() & {*parameters, *observables, *derived}:
        other = {**dict.fromkeys(derived, "derived"), **dict.fromkeys(observables, "an observable")}.get(name)
        other = other or "a parameter"
        raise table.error(("sensors", name), f"a name that is also {other}", "one or the other")
    card = MachineCard(
        machine=machine,
        species=table.species("species"),
        zone=table.zone("zone") or "UTC",
        night_boundary=table.clock("night_boundary") or time(12),
        rejoin_within_s=DAY_S if (seconds := table.seconds("rejoin_within")) is None else seconds,
        naive_times=table.truth("naive_times") or False,
        parameters=parameters,
        observables=observables,
        sensors=sensors,
        derived=derived,
        main_observable=table.name("main_observable"),
        toml=text,
    )
    settled = {} if checked or not derived else _check_derived(card, table)
    main = card.main_observable
    if main is not None and card.observable(main) is None and main not in derived:
        wanted = "an observable of this card" + table.near(main, [*observables, *derived])
        raise table.error("main_observable", repr(main), wanted)
    if main in settled and settled[main].role == "parameter":
        raise table.error("main_observable", f"{main}, which no observable goes into", "an observable")
    return card


def settle_derived(card: MachineCard) -> dict[str, Derived]:
    """Return the derived quantities of a card with their formulas, each behind those that it is made of.

    Raises
    ------
    DefinitionError
        If an expression cannot be used.
    """
    from nightfold.formulas.definitions import Definition, Recorded, settle_definitions

    clouds = {name: Recorded("observable", entry.unit) for name, entry in card.observables.items()}
    recorded = {
        name: Recorded("parameter", entry.unit, entry.kind) for name, entry in card.parameters.items()
    }
    definitions = {name: Definition(entry.expression, entry.unit) for name, entry in card.derived.items()}
    return settle_definitions(definitions, recorded | clouds, clouds)


def _check_derived(card: MachineCard, table: Table) -> dict[str, Derived]:
    from nightfold.formulas.definitions import DefinitionError

    try:
        return settle_derived(card)
    except DefinitionError as problem:
        place = ("derived", problem.name, "expression")
        raise table.error(place, problem.found, problem.wanted) from None


def _derived(name: str, entry: Table) -> DerivedQuantity:
    """Return what an entry of ``[derived]`` says."""
    entry.check_keys("expression", "unit", "range", "description")
    expression = entry.text("expression")
    if expression is None:
        raise entry.error("expression", "nothing", 'one in quotes, such as "2*aom_frequency - 160 MHz"')
    low, high = entry.limits("range") or (None, None)
    description = entry.text("description") or ""
    return DerivedQuantity(name, entry.unit("unit"), low, high, description, "number", expression)


def _parameter(name: str, entry: Table) -> NamedQuantity:
    """Return what an entry of ``[parameters]`` says."""
    entry.check_keys("unit", "range", "kind", "description")
    unit, limits, kind = entry.unit("unit"), entry.limits("range"), entry.kind("kind")
    numeric = [key for key, value in (("unit", unit), ("range", limits)) if value is not None]
    if numeric and kind in ("text", "truth"):
        raise entry.error(numeric[0], f"a {numeric[0]} on a {kind}", f'no {numeric[0]}, or kind = "number"')
    low, high = limits or (None, None)
    return NamedQuantity(
        name, unit, low, high, entry.text("description") or "", "number" if numeric else kind
    )


def _check_clouds(table: Table, observables: Mapping[str, NamedQuantity]) -> None:
    """Refuse clouds of one observable in different units."""
    units: dict[str, str] = {}
    for name, entry in observables.items():
        if entry.unit is None:
            continue
        known = units.setdefault(without_cloud(name), entry.unit)
        if known != entry.unit:
            wanted = f"{known!r}: all clouds of {without_cloud(name)} have one unit"
            raise table.error(("observables", name, "unit"), repr(entry.unit), wanted)


def _observable(name: str, entry: Table) -> NamedQuantity:
    """Return what an entry of ``[observables]`` or ``[sensors]`` says."""
    entry.check_keys("unit", "range", "description")
    low, high = entry.limits("range") or (None, None)
    return NamedQuantity(name, entry.unit("unit"), low, high, entry.text("description") or "", "number")


def starter_card(machine: str, zone: str = "UTC") -> str:
    """Return the text of a card to begin with: the machine and its zone, the rest as commented examples."""
    return _STARTER.format(machine=_quote(machine), zone=_quote(zone), example=TIME_ZONE)


def _quote(text: str) -> str:
    """Return a text as a TOML string; what JSON escapes, TOML reads."""
    return json.dumps(text, ensure_ascii=False).replace("\x7f", "\\u007f")


_STARTER = """\
# The machine card: what the machine's parameters and observables are.
# Remove the # before a line to use it. Nothing but the machine's name is required.
machine = {machine}
zone = {zone}
# An IANA name, such as {example}: times are shown in this zone, and nights are cut in it.

# species = ["39K"]
# night_boundary = "12:00"       # local time at which one night ends and the next begins
# rejoin_within = "24 h"         # a scan label used again within this time goes on with its scan
# naive_times = false            # true: times without an offset are local times of the zone
# main_observable = "atom_number"

# [parameters.coil_current]
# unit = "A"
# range = [0, 120]               # plausible values; one outside is never refused
# description = "current of the Feshbach coils"

# [observables.atom_number]
# unit = "atoms"
# range = [0, 1e6]
# description = "atoms in the trap, from the absorption image"

# [derived.field]                # computed of the others whenever it is asked for
# expression = "0.5413 G/A * coil_current + 0.21 G"
# unit = "G"

# [sensors.room_temperature]
# unit = "degC"
# range = [19, 23]
# description = "beside the optical table"
"""
