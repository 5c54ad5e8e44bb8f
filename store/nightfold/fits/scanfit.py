"""Fitting a scan: its points along one axis, slice by slice over the others."""

from __future__ import annotations

import functools
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from types import CellType, CodeType, FunctionType, MethodType
from typing import TYPE_CHECKING, Any

import numpy as np

from nightfold.card import without_cloud
from nightfold.errors import ChoiceNeeded, FitError, NotFound
from nightfold.fits.curve import fit_curve
from nightfold.fits.judging import name_outliers
from nightfold.fits.many import FitTable, fit_many
from nightfold.fits.request import check_span
from nightfold.fits.result import FitResult
from nightfold.fits.source import PLAIN, Source
from nightfold.ledger.selecting import column_name, near_miss
from nightfold.scans.columns import Column, encode, is_missing
from nightfold.scans.references import WITHIN, read_within
from nightfold.settings import digest_content

if TYPE_CHECKING:
    import pandas as pd
    from numpy.typing import NDArray

    from nightfold.scans.scan import Scan


@dataclass(frozen=True)
class FitRequest:
    """What is to be fitted, and how; as the arguments of `Store.fit`."""

    model: Any
    observable: str
    along: str | None = None
    background: str | None = None
    fixed: dict[str, float] = field(default_factory=dict)
    start: dict[str, float] = field(default_factory=dict)
    weights: str = "auto"
    robust: bool = True
    relative_to: str | None = None
    reference_within: str | float = WITHIN

    @property
    def source(self) -> Source:
        """Where the data come from."""
        if self.relative_to is None:
            return PLAIN
        return Source(self.observable, self.relative_to, read_within(self.reference_within))

    @property
    def options(self) -> dict[str, Any]:
        """The arguments that `fit_curve` takes too."""
        return {
            "background": self.background,
            "fixed": self.fixed or None,
            "start": self.start or None,
            "weights": self.weights,
            "robust": self.robust,
        }

    @property
    def fingerprint(self) -> str | None:
        """What tells a model of one's own from others of its name; None for the built-in ones."""
        return None if isinstance(self.model, str) else fingerprint_model(self.model)


@dataclass(frozen=True)
class SliceFit:
    """One fit of a scan, with what it rests on.

    Attributes
    ----------
    where : dict
        Values of the other axes.
    along : str
    result : FitResult
    table : DataFrame
        The slice's shots, as `Scan.table`; `result.used` counts in its rows.
    left_out : tuple of int
        Ids of the slice's shots that are set aside.
    """

    where: dict[str, Any]
    along: str
    result: FitResult
    table: pd.DataFrame
    left_out: tuple[int, ...]

    def digest(self, observable: str) -> bytes:
        """Return a digest of the data: uids, points, values and their stderr."""
        return digest_data(self.table, self.along, observable)


def digest_data(table: pd.DataFrame, along: str, observable: str) -> bytes:
    """Return a digest of the shots behind a fit: uids, points, values and their stderr.

    Derived values count with 10 digits: the last ones of an exp or a sin are not the same on every computer.
    """
    along, observable = column_name(along), column_name(observable)
    columns = ["uid", along, observable, f"{observable}_stderr"]
    derived = {name for own in table.attrs.get("derived", ()) for name in (own, f"{own}_stderr")}
    return digest_content(
        [
            [float(f"{value:.10g}") for value in table[column]]
            if column in derived
            else table[column].tolist()
            for column in columns
        ]
    )


def fit_slices(scan: Scan, request: FitRequest) -> tuple[FitResult | FitTable, list[SliceFit]]:
    """Fit a scan and return the result as people get it, and fit by fit.

    Raises
    ------
    ChoiceNeeded, NotFound, FitError
        As in `Store.fit`.
    """
    along = choose_along(scan, request.along)
    observable = choose_observable(scan, request.observable)
    everything = request.source.read(scan)
    table, slices = cut_scan(scan, everything, along)
    known = everything.attrs["units"]
    units: dict[str, Any] = {"unit_x": known.get(along, ""), "unit_y": known.get(observable, "")}
    units["started"] = table["started"].to_numpy(dtype="datetime64[us]")
    x, shared = _numbers(scan, table, along), request.source.shared(table)
    if len(scan.axes) < 2:
        result = fit_curve(
            x,
            table[column_name(observable)].to_numpy(),
            request.model,
            stderr=_stderr(table, observable, request),
            shared=shared,
            **request.options,
            **units,
        )
        result = name_outliers(result, table["uid"].tolist())
        return result, [SliceFit({}, along, result, table, slices[0].left_out)]
    values = np.full((len(slices), len(table)), np.nan)
    for number, part in enumerate(slices):
        values[number, part.rows] = table[column_name(observable)].to_numpy()[part.rows]
    stderr = _stderr(table, observable, request)
    fits = fit_many(
        x,
        values,
        request.model,
        full=True,
        stderr=None if stderr is None else np.broadcast_to(stderr, values.shape),
        shared=shared,
        **request.options,
        **units,
    )
    fits = replace(
        fits,
        slices=tuple(part.where for part in slices),
        slice_units={axis.parameter: known.get(axis.parameter, "") for axis in scan.axes},
        about={"scan": scan.key, "machine": scan.machine, "observable": observable, "along": along},
    )
    parts = [
        SliceFit(
            part.where,
            along,
            name_outliers(_within(fits.result(number), part.rows), table["uid"].iloc[part.rows].tolist()),
            table.iloc[part.rows].reset_index(drop=True),
            part.left_out,
        )
        for number, part in enumerate(slices)
    ]
    return fits, parts


def choose_along(scan: Scan, along: str | None) -> str:
    """Return the axis, or a parameter that moves along with one, to fit along.

    Raises
    ------
    ChoiceNeeded
        If the scan has several axes and none is named.
    NotFound
        If it does not have the one named.
    FitError
        If nothing was swept.
    """
    axes = [axis.parameter for axis in scan.axes]
    if not axes:
        raise FitError(f"scan {scan.key}: nothing was swept, so there is nothing to fit along")
    if along is None:
        if len(axes) > 1:
            raise ChoiceNeeded(
                f"scan {scan.key}: it has {len(axes)} axes, {', '.join(axes)}; name the one to fit along"
            )
        return axes[0]
    if along in scan.mixed:
        several = ", ".join(scan.mixed[along])
        raise FitError(f"scan {scan.key}: {along} depends on several axes ({several}); fit along one of them")
    if along not in axes and along not in scan.followers:
        raise NotFound(f"scan {scan.key}: no axis {along!r}; {near_miss(along, [*axes, *scan.followers])}")
    return along


def choose_observable(scan: Scan, observable: str) -> str:
    """Return the observable to fit.

    Raises
    ------
    NotFound
        If no shot of the scan has it.
    ChoiceNeeded
        If the scan has several clouds of it.
    """
    if observable not in scan.observables:
        clouds = [name for name in scan.observables if without_cloud(name) == observable]
        if clouds:
            raise ChoiceNeeded(
                f"scan {scan.key}: {observable} was read of clouds: name one, {' or '.join(clouds)}"
            )
        raise NotFound(
            f"scan {scan.key}: no observable {observable!r}; {near_miss(observable, scan.observables)}"
        )
    return observable


@dataclass(frozen=True)
class ScanSlice:
    """One slice of a scan.

    Attributes
    ----------
    where : dict
        Values of the axes not fitted along.
    rows : (n,) int array
        Its rows in the table of the scan's shots in results.
    left_out : tuple of int
        Ids of its shots that are set aside.
    """

    where: dict[str, Any]
    rows: NDArray[np.intp]
    left_out: tuple[int, ...]


def cut_scan(scan: Scan, everything: pd.DataFrame, along: str) -> tuple[pd.DataFrame, list[ScanSlice]]:
    """Return the shots in results, and the slices of the scan across the axis fitted along.

    `everything` is the scan's table with the shots set aside. The shots in results alone say which slices
    there are. Those set aside count to the slice of the same values, and to none where there is no such
    slice: a setting may be what was wrong with them.
    """
    aside = everything["set_aside"].to_numpy(dtype=bool)
    table = everything[~aside].reset_index(drop=True)
    leader = scan.followers.get(along, along)
    others = [axis.parameter for axis in scan.axes if axis.parameter != leader]
    left_ids = everything["shot_id"].to_numpy()[aside]
    if not others:
        return table, [ScanSlice({}, np.arange(len(table)), tuple(left_ids.tolist()))]
    settings = [everything[column_name(name)].to_numpy() for name in others]
    columns = [encode(values[~aside].tolist()) for values in settings]
    codes = np.stack([column.codes for column in columns], axis=1)
    left = np.stack(
        [
            _codes_of(values[aside].tolist(), values[~aside].tolist(), column)
            for values, column in zip(settings, columns, strict=True)
        ],
        axis=1,
    )
    slices = []
    for key in np.unique(codes[(codes >= 0).all(axis=1)], axis=0):
        where = {
            name: _plain(column.values[code]) for name, column, code in zip(others, columns, key, strict=True)
        }
        rows, ids = np.flatnonzero((codes == key).all(axis=1)), left_ids[(left == key).all(axis=1)]
        slices.append(ScanSlice(where, rows, tuple(ids.tolist())))
    return table, slices


def count_left_out(scan: Scan, along: str | None = None) -> list[tuple[dict[str, Any], int]]:
    """Return how many shots of each slice are set aside, beside the values of the slice.

    Raises
    ------
    ChoiceNeeded, NotFound, FitError
        As in `Store.fit`.
    """
    _, slices = cut_scan(scan, scan.table(set_aside=True), choose_along(scan, along))
    return [(part.where, len(part.left_out)) for part in slices]


def _codes_of(values: Sequence[Any], known: Sequence[Any], column: Column) -> NDArray[np.intp]:
    """Return the codes that values have in a column made of others; -1 for those that are not in it."""
    codes = np.full(len(values), -1, dtype=np.intp)
    for row, value in enumerate(values):
        if is_missing(value):
            continue
        if not column.numeric:
            found = [code for code, other in enumerate(column.values.tolist()) if other == value]
        elif isinstance(value, (str, bool)):
            found = []
        else:
            near = np.abs(np.array(known, dtype=np.float64) - value)
            place = int(np.nanargmin(near))
            found = [column.codes[place]] if near[place] <= column.tolerance else []
        codes[row] = found[0] if found else -1
    return codes


def _plain(value: Any) -> Any:
    return value.item() if isinstance(value, np.generic) else value


def _within(result: FitResult, rows: Sequence[int] | NDArray[np.intp]) -> FitResult:
    """Return the result with `used` and `outliers` counted within the slice."""
    place: Mapping[int, int] = {int(row): number for number, row in enumerate(rows)}
    return replace(
        result,
        used=np.array([place[int(row)] for row in result.used], dtype=np.intp),
        outliers=tuple(place[row] for row in result.outliers),
    )


def _numbers(scan: Scan, table: pd.DataFrame, along: str) -> NDArray[np.float64]:
    values = table[column_name(along)].tolist()
    strange = next((value for value in values if isinstance(value, (str, bool))), None)
    if strange is not None:
        raise FitError(f"scan {scan.key}: {along} is no number (found {strange!r}); a fit goes along numbers")
    numbers = np.array([np.nan if value is None else value for value in values], dtype=np.float64)
    check_span(f"scan {scan.key}: {along}", numbers)
    return numbers


def _stderr(table: pd.DataFrame, observable: str, request: FitRequest) -> NDArray[np.float64] | None:
    """Return the stated uncertainties if every value has one; they are required with weights 'given'."""
    stderr = table[f"{column_name(observable)}_stderr"].to_numpy(dtype=np.float64)
    known = np.isfinite(table[column_name(observable)].to_numpy(dtype=np.float64))
    if request.weights == "given":
        return stderr
    usable = np.isfinite(stderr) & (stderr > 0)
    return stderr if known.any() and usable[known].all() else None


def fingerprint_model(model: Any) -> str:
    """Return a digest of a `Model` or lmfit model: of what it computes and where it starts, not of its name.

    Functions count by their code and by the plain values and functions that this refers to. Other objects
    count by the name of their type only, so a change within one goes unseen.
    """
    return digest_content(_model_facts(model)).hex()


def _model_facts(model: Any) -> list[Any]:
    if hasattr(model, "op"):  # a composite of lmfit
        return [_facts(model.op, {}), _model_facts(model.left), _model_facts(model.right)]
    function = getattr(model, "function", None) or getattr(model, "func", None)
    parameters = getattr(model, "parameters", None) or getattr(model, "param_names", None)
    names = ("linear", "start", "prefix", "independent_vars", "opts", "param_hints", "expr")
    return [_facts(item, {}) for item in (function, parameters, *(getattr(model, n, None) for n in names))]


def _facts(thing: Any, seen: dict[int, Any]) -> Any:
    """Return plain values that are equal for equal functions and values, in every process."""
    if isinstance(thing, (bool, int, float, complex, str, bytes, np.generic)):
        return repr(thing)
    if isinstance(thing, (FunctionType, Mapping, list)):  # what can come round to itself
        if id(thing) in seen:
            return "again"
        seen[id(thing)] = thing
    match thing:
        case Mapping():
            return [[repr(key), _facts(value, seen)] for key, value in thing.items()]
        case set() | frozenset():
            return sorted(repr(_facts(item, seen)) for item in thing)
        case list() | tuple():
            return [_facts(item, seen) for item in thing]
        case np.ndarray():
            return [str(thing.dtype), thing.shape, thing.tolist()]
        case CodeType():
            return [thing.co_code.hex(), _facts(thing.co_consts, seen), thing.co_names, thing.co_freevars]
        case FunctionType():
            return _facts(_parts_of(thing), seen)
        case MethodType():
            return _facts(thing.__func__, seen)
        case functools.partial():
            return _facts((thing.func, thing.args, thing.keywords), seen)
    kind = thing if hasattr(thing, "__name__") else type(thing)
    return [getattr(kind, "__module__", None), getattr(kind, "__qualname__", kind.__name__)]


def _parts_of(function: FunctionType) -> tuple[Any, ...]:
    """Return a function's code, and what it refers to outside of itself."""
    code, known = function.__code__, function.__globals__
    cells = tuple(cell.cell_contents for cell in function.__closure__ or () if cell != CellType())
    return code, cells, {name: known[name] for name in code.co_names if name in known}
