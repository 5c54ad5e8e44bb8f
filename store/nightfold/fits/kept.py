"""Keeping fits in the store with their provenance, and reading them back."""

from __future__ import annotations

import json
from collections import defaultdict
from collections.abc import Mapping, Sequence
from contextlib import suppress
from itertools import pairwise
from typing import Any

import numpy as np
from sqlalchemy import Connection, Row, func, insert, select, update

from nightfold import tables
from nightfold.errors import NotFound
from nightfold.fits.keptfit import LEVEL_68, LEVEL_95, KeptEstimate, KeptFit
from nightfold.fits.many import FitTable
from nightfold.fits.result import FitResult, FitWarning
from nightfold.fits.scanfit import FitRequest, SliceFit, cut_scan, digest_data, fit_slices
from nightfold.fits.source import PLAIN, Source
from nightfold.ledger.deriving import versions_in_use
from nightfold.ledger.names import insert_row
from nightfold.ledger.rows import chunks
from nightfold.ledger.selecting import scan_key
from nightfold.ledger.setting_aside import find_shots
from nightfold.scans.listing import find_scan
from nightfold.scans.scan import Scan
from nightfold.session import Session
from nightfold.timestamps import from_us, now_us
from nightfold.version import __version__


def fit_scan(session: Session, scan: Scan, request: FitRequest, *, keep: bool) -> FitResult | FitTable:
    """Fit a scan and keep what came out.

    Raises
    ------
    ChoiceNeeded, NotFound, FitError
        As in `Store.fit`.
    """
    outcome, parts = fit_slices(scan, request)
    if keep:
        with session.writing() as connection:
            for part in parts:
                keep_fit(connection, scan, request, part)
    return outcome


def keep_fit(connection: Connection, scan: Scan, request: FitRequest, part: SliceFit) -> None:
    """Keep one fit of a scan, unless the same fit of the same data is there; it replaces the one before."""
    result, fit = part.result, tables.fit
    observable_id = _observable_id(connection, scan, request.observable)
    same = {
        "scan_id": scan.id,
        "observable_id": observable_id,
        "along": part.along,
        "slice": slice_text(part.where),
        "model": result.model,
        "background": result.background,
    }
    own: dict[str, Any] = {"function": request.fingerprint} if request.fingerprint else {}
    names = [request.observable, part.along, *part.where]
    if versions := versions_in_use(connection, scan.machine, names):
        own["derived"] = versions
    rest = {
        "settings": json.dumps({**result.settings, **request.source.settings, **own}, default=float),
        "data_digest": part.digest(request.observable),
        "program": __version__,
    }
    query = select(fit).where(*(fit.c[name] == value for name, value in same.items()))
    relative = request.relative_to is not None
    alike = [
        row for row in connection.execute(query.order_by(fit.c.id.desc())) if _is_relative(row) == relative
    ]
    _make_one_line(connection, alike)
    earlier = alike[0] if alike else None
    if earlier is not None and all(earlier._mapping[name] == value for name, value in rest.items()):
        return  # the same fit of the same data is there already
    covariance = {"names": list(result.free_names), "rows": result.covariance_matrix.tolist()}
    if result.shared_stderr:
        covariance["shared_stderr"] = result.shared_stderr
    row = {
        **same,
        **rest,
        "covariance": json.dumps(covariance),
        "trusted": result.trusted,
        "dof": result.dof,
        "residual_stderr": _known(result.residual_stderr),
        "at_us": now_us(),
        "replaces": earlier.id if earlier is not None else None,
    }
    fit_id = insert_row(connection, fit, row)
    connection.execute(insert(tables.fit_shot), _fit_shots(fit_id, part))
    connection.execute(insert(tables.estimate), _estimates(fit_id, result))
    warnings = [
        {"fit_id": fit_id, "code": item.code, "message": item.message, "advisory": item.advisory}
        for item in result.warnings
    ]
    if warnings:
        connection.execute(insert(tables.fit_warning), warnings)


def _make_one_line(connection: Connection, alike: Sequence[Row[Any]]) -> None:
    """Let the newest of several lines of fits, each of which replaced the one before, go on from the others.

    There are several where scans became one, each with its fits.
    """
    replaces = {row.id: row.replaces for row in alike}
    newest = [number for number in replaces if number not in replaces.values()]
    for number, older in pairwise(newest):
        first = number
        while replaces[first] is not None:
            first = replaces[first]
        replaces[first] = older
        connection.execute(update(tables.fit).where(tables.fit.c.id == first).values(replaces=older))


def slice_text(where: Mapping[str, Any]) -> str:
    """Return how a slice is kept: the values of the other axes as JSON."""
    return json.dumps(where, ensure_ascii=False)


def _fit_shots(fit_id: int, part: SliceFit) -> list[dict[str, Any]]:
    shot_ids = part.table["shot_id"].tolist()
    used = {int(row) for row in part.result.used}
    outliers = set(part.result.outliers)
    roles = {
        shot_id: "outlier" if row in outliers else "used" if row in used else "no value"
        for row, shot_id in enumerate(shot_ids)
    }
    roles |= dict.fromkeys(part.left_out, "set aside")
    return [{"fit_id": fit_id, "shot_id": shot_id, "role": role} for shot_id, role in roles.items()]


def _estimates(fit_id: int, result: FitResult) -> list[dict[str, Any]]:
    rows = []
    for position, (name, estimate) in enumerate(result.estimates.items()):
        low68, high68 = estimate.interval(LEVEL_68)
        low95, high95 = estimate.interval(LEVEL_95)
        numbers = {
            "value": estimate.value,
            "stderr": estimate.stderr,
            "low68": low68,
            "high68": high68,
            "low95": low95,
            "high95": high95,
        }
        kept = {key: _known(number) for key, number in numbers.items()}
        fixed = name not in result.free_names
        rows.append(
            {
                "fit_id": fit_id,
                "name": name,
                "position": position,
                "unit": estimate.unit,
                "fixed": fixed,
                **kept,
            }
        )
    return rows


def _known(number: float) -> float | None:
    """Return None for NaN, which databases treat differently; infinities are kept as they are."""
    return None if np.isnan(number) else float(number)


def _observable_id(connection: Connection, scan: Scan, observable: str) -> int:
    query = (
        select(tables.observable.c.id)
        .join(tables.machine, tables.machine.c.id == tables.observable.c.machine_id)
        .where(tables.machine.c.name == scan.machine, tables.observable.c.name == observable)
    )
    return int(connection.execute(query).scalar_one())


def list_fits(session: Session, scan: Scan | None, shots: Sequence[str] | None = None) -> list[KeptFit]:
    """Return the fits kept, oldest first; those replaced by a newer one are left out.

    Parameters
    ----------
    scan : Scan, optional
        Only fits of this scan.
    shots : sequence of str, optional
        Only fits that used one of these shots, or whose scan has one of them now.

    Raises
    ------
    NotFound
        If a shot is not in the store.
    """
    fit, observable = tables.fit, tables.observable
    replaced = select(fit.c.replaces).where(fit.c.replaces.isnot(None))
    query = (
        select(fit, observable.c.name.label("observable"), tables.scan.c.label, tables.scan.c.round)
        .join(observable, observable.c.id == fit.c.observable_id)
        .join(tables.scan, tables.scan.c.id == fit.c.scan_id)
        .where(fit.c.id.notin_(replaced))
        .order_by(fit.c.at_us, fit.c.id)
    )
    if scan is not None:
        query = query.where(fit.c.scan_id == scan.id)
    with session.reading() as connection:
        rows = list(connection.execute(query))
        if shots is not None:
            used, scans = _concerned(connection, shots)
            rows = [row for row in rows if row.id in used or row.scan_id in scans]
        ids = [row.id for row in rows]
        estimates, warnings = _read_estimates(connection, ids), _read_warnings(connection, ids)
        counts = _count_roles(connection, ids)
    digests = _current_digests(session, rows, scan)
    return [
        _make_kept(row, estimates[row.id], warnings[row.id], counts[row.id], digests.get(_data_of(row)))
        for row in rows
    ]


def _concerned(connection: Connection, uids: Sequence[str]) -> tuple[set[int], set[int]]:
    """Return the fits that used one of the shots, and the scans that have one."""
    found = find_shots(connection, uids).values()
    table, used = tables.fit_shot, set[int]()
    for part in chunks([shot.id for shot in found]):
        used.update(connection.execute(select(table.c.fit_id).where(table.c.shot_id.in_(part))).scalars())
    return used, {shot.scan_id for shot in found if shot.scan_id is not None}


def _read_estimates(connection: Connection, ids: Sequence[int]) -> dict[int, dict[str, KeptEstimate]]:
    table = tables.estimate
    found: dict[int, dict[str, KeptEstimate]] = defaultdict(dict)
    for part in chunks(ids):
        query = select(table).where(table.c.fit_id.in_(part)).order_by(table.c.fit_id, table.c.position)
        for row in connection.execute(query):
            found[row.fit_id][row.name] = KeptEstimate(
                _number(row.value),
                _number(row.stderr),
                row.unit,
                (_number(row.low68), _number(row.high68)),
                (_number(row.low95), _number(row.high95)),
                bool(row.fixed),
            )
    return found


def _read_warnings(connection: Connection, ids: Sequence[int]) -> dict[int, list[FitWarning]]:
    table = tables.fit_warning
    found: dict[int, list[FitWarning]] = defaultdict(list)
    for part in chunks(ids):
        query = select(table).where(table.c.fit_id.in_(part)).order_by(table.c.fit_id, table.c.code)
        for row in connection.execute(query):
            found[row.fit_id].append(FitWarning(row.code, row.message, bool(row.advisory)))
    return found


def _count_roles(connection: Connection, ids: Sequence[int]) -> dict[int, dict[str, int]]:
    table = tables.fit_shot
    found: dict[int, dict[str, int]] = defaultdict(dict)
    for part in chunks(ids):
        query = (
            select(table.c.fit_id, table.c.role, func.count().label("shots"))
            .where(table.c.fit_id.in_(part))
            .group_by(table.c.fit_id, table.c.role)
        )
        for row in connection.execute(query):
            found[row.fit_id][row.role] = row.shots
    return found


def _number(value: float | None) -> float:
    return float("nan") if value is None else value


_Data = tuple[int, Source, str, str, str]


def _data_of(row: Row[Any]) -> _Data:
    """Return what says which data a fit rests on: scan, source, axis, observable and slice."""
    return row.scan_id, _source_of(row), row.along, row.observable, row.slice


def _source_of(row: Row[Any]) -> Source:
    settings = json.loads(row.settings)
    if settings.get("relative_to") is None:
        return PLAIN
    return Source(row.observable, settings["relative_to"], settings["reference_within"])


def _is_relative(row: Row[Any]) -> bool:
    return json.loads(row.settings).get("relative_to") is not None


def _current_digests(session: Session, rows: Sequence[Row[Any]], scan: Scan | None) -> dict[_Data, bytes]:
    """Return the digests that the data of fits have today; none where the scan no longer has such data."""
    wanted: dict[tuple[int, Source], dict[str, set[tuple[str, str]]]] = defaultdict(lambda: defaultdict(set))
    for row in rows:
        wanted[row.scan_id, _source_of(row)][row.along].add((row.observable, row.slice))
    digests: dict[_Data, bytes] = {}
    for (scan_id, source), axes in wanted.items():
        try:
            found = scan or find_scan(session, scan_id)
            everything = source.read(found)
        except NotFound:
            continue  # no shots any more, or no reference shots: its fits are stale
        for along, data in axes.items():
            table, slices = cut_scan(found, everything, along)
            places = {slice_text(part.where): part.rows for part in slices}
            for observable, where in data:
                with suppress(KeyError):  # slice, axis or observable is gone: the fit is stale
                    rows_now = table.iloc[places[where]]
                    digest = digest_data(rows_now, along, observable)
                    digests[scan_id, source, along, observable, where] = digest
    return digests


def _make_kept(
    row: Row[Any],
    estimates: dict[str, KeptEstimate],
    warnings: Sequence[FitWarning],
    counts: dict[str, int],
    digest: bytes | None,
) -> KeptFit:
    return KeptFit(
        id=row.id,
        at=from_us(row.at_us),
        scan_id=row.scan_id,
        scan_key=scan_key(row.scan_id, row.label, row.round) or "",
        model=row.model,
        background=row.background,
        observable=row.observable,
        along=row.along,
        slice=json.loads(row.slice),
        estimates=estimates,
        trusted=bool(row.trusted),
        warnings=tuple(warnings),
        shots=counts.get("used", 0),
        set_aside=counts.get("set aside", 0),
        settings=json.loads(row.settings),
        stale=digest is None or digest != bytes(row.data_digest),
        version=row.program,
        replaces=row.replaces,
        shared_stderr=json.loads(row.covariance).get("shared_stderr", {}),
    )
