"""The reference shots near a scan, and its table relative to them."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from math import ceil, inf
from shlex import quote
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import Connection, Row, and_, select

from nightfold import tables
from nightfold.card import split_cloud
from nightfold.cardkeys import read_span
from nightfold.errors import ChoiceNeeded, NoReference
from nightfold.ledger.columns import Named, reading_columns
from nightfold.ledger.selecting import column_name, set_aside_now
from nightfold.scans.relative import Floats, Level, known_stderr, level_at, nearest, ratio_of
from nightfold.units import counts_from_zero

if TYPE_CHECKING:
    import pandas as pd

WITHIN = "30 min"
"""How far a reference shot may be from a shot, unless said otherwise."""

_SURE = 3.0  # standard uncertainties that a level must be away from zero to be divided by
_SECOND_US = 1_000_000
_LONGEST_S = 1e10  # some 300 years: no shots lie farther apart


@dataclass(frozen=True, slots=True)
class Comparison:
    """What is compared with reference shots, and how near they must be.

    Attributes
    ----------
    scan : str
        Its key, for messages.
    machine_id : int
    sequence : str
        Reference shots of it come first.
    observables : tuple of Named
    within_s : float
    """

    scan: str
    machine_id: int
    sequence: str
    observables: tuple[Named, ...]
    within_s: float


@dataclass(frozen=True, slots=True)
class _References:
    """Reference shots with a value of one observable, of one sequence, in order of start."""

    sequence: str
    uids: NDArray[Any]
    times_s: Floats
    values: Floats
    stderr: Floats

    def take(self, rows: NDArray[Any]) -> _References:
        return replace(
            self,
            uids=self.uids[rows],
            times_s=self.times_s[rows],
            values=self.values[rows],
            stderr=self.stderr[rows],
        )

    def near(self, at: Floats, within_s: float) -> _References:
        """Return those that are near one of some moments."""
        return self.take(nearest(self.times_s, np.sort(at)) <= within_s)

    def facts(self, origin_us: int, within_s: float) -> dict[str, list[Any]]:
        """Return what tells which errors shots share: when the reference shots started, and how well they are known."""
        known = known_stderr(self.times_s, self.values, self.stderr, within_s)
        started = np.round(self.times_s * _SECOND_US).astype(np.int64) + origin_us
        return {"started_us": started.tolist(), "stderr": known.tolist()}


def read_within(within: str | float) -> float:
    """Return a limit in seconds, from a number of them or a text such as ``30 min``.

    Raises
    ------
    ChoiceNeeded
        If it is neither.
    """
    span = read_span(within)
    if span is None or not 0 < span < inf:
        raise ChoiceNeeded(f"reference_within: found {within!r}, wanted a time such as '30 min', or seconds")
    return span


def check_relative(relative_to: str | None) -> None:
    """Refuse what a scan cannot be related to.

    Raises
    ------
    ChoiceNeeded
    """
    if relative_to not in (None, "reference"):
        raise ChoiceNeeded(f"relative_to: found {relative_to!r}, wanted 'reference' or None")


def reference_name(name: str, taken: Sequence[str]) -> str:
    """Return the name under which the level of the reference shots stands: ``atom_number_reference[up]``."""
    base, cloud = split_cloud(name)
    found = f"{base}_reference"
    while (full := found if cloud is None else f"{found}[{cloud}]") in taken:
        found += "_"
    return full


def describe_levels(
    levels: Mapping[str, str], descriptions: Mapping[str, str]
) -> tuple[list[str], dict[str, str]]:
    """Return the observables of a table made by `relate`, each before its level, and what they all are."""
    texts = dict(descriptions)
    for name, level in levels.items():
        known = descriptions.get(name, name)
        texts |= {name: f"{known}, relative to reference shots", level: f"{known}, by the reference shots"}
    return [each for pair in levels.items() for each in pair], texts


def relate(connection: Connection, table: pd.DataFrame, comparison: Comparison) -> pd.DataFrame:
    """Return the table of a scan with its observables divided by what reference shots say at that moment.

    Beside each observable and its ``_stderr`` stand ``<observable>_reference``, that level, and its ``_stderr``.
    ``attrs["levels"]`` says which is whose, ``attrs["relative"]`` how many reference shots there are, and how far
    the worst shot is from them; ``attrs["references"]`` when those of each observable started (us since 1970), and
    their standard uncertainties.

    Raises
    ------
    NoReference
        If reference shots are too far, lack the observable, or read what cannot be divided by.
    """
    import pandas as pd

    at_us = table["started"].dt.tz_localize(None).to_numpy("datetime64[us]").astype(np.int64)
    moments = _Moments(int(at_us.min()) if len(at_us) else 0, at_us)
    near = _read(connection, comparison, moments)
    columns: dict[str, Any] = {str(name): table[name] for name in table.columns}
    units, levels, references = dict(table.attrs["units"]), {}, {}
    used: list[_References] = []
    worst = 0.0
    for item in comparison.observables:
        column = column_name(item.name)
        values, stderr = (table[name].to_numpy(np.float64) for name in (column, f"{column}_stderr"))
        asked = np.isfinite(values) & ~table["set_aside"].to_numpy(bool)
        found = _choose(comparison, item, near[item.name], moments.at_s[asked])
        level = level_at(moments.at_s, found.times_s, found.values, found.stderr, comparison.within_s)
        if not np.isfinite(level.value[asked]).all():
            raise _too_far(connection, comparison, item, found, moments, asked)
        _check_level(comparison, item, found, level, asked)
        used.append(found)
        worst = max(worst, *level.distance_s[asked], 0.0)
        name = reference_name(item.name, list(units))
        columns[column], columns[f"{column}_stderr"] = ratio_of(values, stderr, level)
        columns[column_name(name)], columns[f"{column_name(name)}_stderr"] = level.value, level.stderr
        units |= {item.name: "", name: item.unit}
        levels[item.name] = name
        references[item.name] = found.facts(moments.origin_us, comparison.within_s)
    frame = pd.DataFrame(columns)
    frame.attrs = {
        **table.attrs,
        "units": units,
        "levels": levels,
        "references": references,
        "relative": {
            "relative_to": "reference",
            "reference_shots": len({uid for each in used for uid in each.uids}),
            "reference_sequence": ", ".join(sorted({each.sequence for each in used if len(each.uids)})),
            "reference_within_s": comparison.within_s,
            "reference_distance_s": worst,
        },
    }
    return frame


@dataclass(frozen=True, slots=True)
class _Moments:
    """When the shots of a scan started; seconds count from `origin_us`."""

    origin_us: int
    at_us: NDArray[np.int64]

    @property
    def at_s(self) -> Floats:
        return self.seconds(self.at_us)

    def seconds(self, us: NDArray[np.int64]) -> Floats:
        return (us - self.origin_us) / _SECOND_US


def _read(
    connection: Connection, comparison: Comparison, moments: _Moments, *, everywhere: bool = False
) -> dict[str, list[_References]]:
    """Return the reference shots of the machine, near a scan or all of them, by observable and sequence."""
    shot, sequence = tables.shot, tables.sequence
    of_machine = select(sequence.c.id).where(sequence.c.machine_id == comparison.machine_id)
    where = and_(shot.c.reference, ~set_aside_now(shot.c.id), shot.c.sequence_id.in_(of_machine))
    if not everywhere and len(moments.at_us):
        limit = int(min(comparison.within_s, _LONGEST_S) * _SECOND_US)
        low, high = int(moments.at_us.min()) - limit, int(moments.at_us.max()) + limit
        where = and_(where, shot.c.started_us.between(low, high))
    query = (
        select(shot.c.id, shot.c.uid, shot.c.set_id, shot.c.started_us, sequence.c.name)
        .join(sequence, sequence.c.id == shot.c.sequence_id)
        .where(where)
        .order_by(shot.c.started_us, shot.c.id)
    )
    rows: list[Row[Any]] = list(connection.execute(query))
    names = np.array([row.name for row in rows], dtype=object)
    times = moments.seconds(np.array([row.started_us for row in rows], dtype=np.int64))
    uids = np.array([row.uid for row in rows], dtype=object)
    readings = reading_columns(connection, rows, comparison.observables, where)
    return {
        observable: [
            _References(name, uids, times, values, stderr).take((names == name) & np.isfinite(values))
            for name in dict.fromkeys(names.tolist())
        ]
        for observable, (values, stderr) in readings.items()
    }


def _choose(comparison: Comparison, item: Named, all_near: Sequence[_References], at: Floats) -> _References:
    """Return the reference shots to compare with: those of the scan's own sequence, else of the only one near."""
    near = [each.near(at, comparison.within_s) for each in all_near]
    near = [each for each in near if len(each.uids)]
    own = [each for each in near if each.sequence == comparison.sequence]
    if own or len(near) == 1:
        return (own or near)[0]
    if near:
        raise NoReference(
            f"{_start(comparison, item)}: found reference shots of several sequences within "
            f"{span_text(comparison.within_s)}, {', '.join(each.sequence for each in near)}, but none of "
            f"{comparison.sequence}; wanted some of it, or of one other alone"
        )
    nothing = np.array([])
    return _References(comparison.sequence, nothing, nothing, nothing, nothing)


def _too_far(
    connection: Connection,
    comparison: Comparison,
    item: Named,
    found: _References,
    moments: _Moments,
    asked: NDArray[np.bool_],
) -> NoReference:
    """Return what to say when shots have no reference shot near enough; `found` are those near some."""
    everywhere = _read(connection, comparison, moments, everywhere=True)[item.name]
    known = [each for each in everywhere if not len(found.uids) or each.sequence == found.sequence]
    times = np.sort(np.concatenate([np.array([]), *(each.times_s for each in known)]))
    limit = span_text(comparison.within_s)
    if not len(times):
        return NoReference(
            f"{_start(comparison, item)}: found no reference shot of its machine that has it, wanted some within "
            f'{limit} of every shot (records that say "reference": true, not set aside)'
            + _another(connection, comparison, moments, item)
        )
    away = nearest(moments.at_s[asked], times)
    far = away[away > comparison.within_s]
    return NoReference(
        f"{_start(comparison, item)}: {len(far)} of {len(away)} shots have no reference shot within {limit}, the worst "
        f"has its nearest {span_text(far.max())} away; if that is near enough, say so: "
        f"reference_within='{span_text(far.max(), up=True)}' (--reference-within)"
    )


def _another(connection: Connection, comparison: Comparison, moments: _Moments, item: Named) -> str:
    """Return the proposal to look at another observable, if reference shots have one that can be compared."""
    near = _read(connection, comparison, moments)
    base = split_cloud(item.name)[0]
    there = [name for name, found in near.items() if any(len(each.uids) for each in found)]
    for name in sorted(there, key=lambda name: split_cloud(name)[0] != base):
        return f"; they have {name}: ask for that alone, as in -o {quote(name)} (observables=[{name!r}])"
    return ""


def _check_level(
    comparison: Comparison, item: Named, found: _References, level: Level, asked: NDArray[np.bool_]
) -> None:
    """Refuse a level that nothing can be divided by."""
    start = _start(comparison, item)
    if not counts_from_zero(item.unit):
        raise NoReference(
            f"{start}: it is in {item.unit}, which does not count from zero; a ratio means nothing"
        )
    if not len(found.uids):
        return
    signs = np.sign(found.values)
    alike = signs == (1.0 if (signs > 0).sum() * 2 >= len(signs) else -1.0)
    odd = np.flatnonzero(~alike)
    if len(odd):
        others = found.values[alike] if alike.any() else found.values
        raise NoReference(
            f"{start}: reference shot {found.uids[odd[0]]} reads {found.values[odd[0]]:.4g} where others read "
            f"{np.median(others):.4g}: a ratio needs readings of one sign, never zero; set the shot aside "
            "if it failed, else leave the observable out"
        )
    with np.errstate(invalid="ignore"):
        unsure = np.flatnonzero(asked & (np.abs(level.value) < _SURE * level.stderr))
    if len(unsure):
        row = unsure[0]
        raise NoReference(
            f"{start}: the reference shots say {level.value[row]:.3g} with a standard uncertainty of "
            f"{level.stderr[row]:.2g}, wanted {_SURE:g} times as much at least: nothing can be divided by what may "
            "be zero; leave the observable out"
        )


def _start(comparison: Comparison, item: Named) -> str:
    return f"scan {comparison.scan}: {item.name} relative to reference shots"


def span_text(seconds: float, *, up: bool = False) -> str:
    """Return a time in words that `read_within` reads: ``45 s``, ``30 min``, ``2.1 h``; rounded up if so asked."""
    sizes = (("s", 1.0, 120.0), ("min", 60.0, 7200.0), ("h", 3600.0, 172800.0), ("d", 86400.0, inf))
    unit, size = next((unit, size) for unit, size, most in sizes if seconds < most)
    tenths = ceil(seconds / size * 10 - 1e-9) if up else round(seconds / size * 10)
    return f"{tenths / 10:g} {unit}"
