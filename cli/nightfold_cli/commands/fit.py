"""``nightfold fit KEY MODEL… -o OBSERVABLE``: fit models to a scan."""

from __future__ import annotations

import sys
from argparse import ArgumentParser, Namespace
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from nightfold_cli import estimates
from nightfold_cli.arguments import add_scan_key, named_number
from nightfold_cli.charts import chart_of_points
from nightfold_cli.failures import UsageError
from nightfold_cli.opening import opened
from nightfold_cli.points import points_of
from nightfold_cli.progress import Progress
from nightfold_cli.render import Cell, Column, Row, Screen
from nightfold_cli.settings import setting

if TYPE_CHECKING:
    from nightfold.fits.result import FitResult
    from nightfold.scans.axes import Axis
    from nightfold.scans.scan import Scan
    from nightfold.store import Store

HELP = "fit models to a scan, with intervals and warnings"
EXAMPLES = (
    "nightfold fit loss-coarse lorentzian -o atom_number",
    "nightfold fit loss-map lorentzian -o atom_number --along coil_current",
    "nightfold fit decay exponential two-body -o atom_number --fixed amplitude=1.2e5",
)
_HEIGHT = 15
_DENSE = 600


@dataclass(frozen=True, slots=True)
class Slice:
    """One fit: where in the scan, and what came out."""

    where: dict[str, Any]
    result: FitResult


def add_arguments(parser: ArgumentParser) -> None:
    """Declare the arguments."""
    add_scan_key(parser)
    parser.add_argument("models", metavar="MODEL", nargs="+", help="'nightfold models' lists them")
    parser.add_argument("-o", "--observable", metavar="NAME", help="default: the machine's main one")
    parser.add_argument("--along", metavar="PARAMETER", help="the axis to fit along, where there are several")
    parser.add_argument("--background", choices=("none", "flat", "sloped"), help="default: that of the model")
    parser.add_argument("--plain", action="store_true", help="equal weights and no robust step")
    for name, help_line in (("--fixed", "hold a parameter"), ("--start", "where to begin")):
        parser.add_argument(
            name, metavar="NAME=VALUE", type=named_number, action="append", default=[], help=help_line
        )
    parser.add_argument("--no-keep", action="store_true", help="do not keep the fit in the store")


def run(args: Namespace) -> int:
    """Fit every model, show them one below the other."""
    screen = Screen.here(args.json)
    with opened(args, screen) as store:
        scan = store.scan(args.key)
        observable = _observable(scan, args.observable)
        fits = [(model, _fit(store, scan, model, observable, args)) for model in args.models]
        if screen.json:
            entries = [_entry(scan, model, observable, part, args) for model, parts in fits for part in parts]
            screen.answer({"fits": entries})
            return 0
        for model, parts in fits:
            if args.along and len(scan.axes) > 1:
                _show_slices(screen, scan, model, observable, parts, args)
            else:
                _show(screen, scan, model, observable, parts[0].result, args)
    return 0


def _observable(scan: Scan, asked: str | None) -> str:
    """Return the observable to fit."""
    if asked:
        return asked
    if scan.main_observable is None:
        raise UsageError(f"scan {scan.key}: name what to fit, -o {' or '.join(scan.observables) or 'NAME'}")
    return scan.main_observable


def _fit(store: Store, scan: Scan, model: str, observable: str, args: Namespace) -> list[Slice]:
    """Fit one model."""
    with Progress(f"fitting {model}", 0, sys.stderr):
        outcome = store.fit(
            scan,
            model,
            observable=observable,
            along=args.along,
            background=args.background,
            fixed=dict(args.fixed) or None,
            start=dict(args.start) or None,
            weights="equal" if args.plain else "auto",
            robust=not args.plain,
            keep=not args.no_keep,
        )
    raise NotImplementedError(outcome)


def _title(scan: Scan, model: str, observable: str, along: str, args: Namespace) -> tuple[str, str]:
    """Return what was fitted to what."""
    background = f", {args.background} background" if args.background else ""
    return f"{model} through {observable} of {scan.key}", f"along {along}{background}"


def _show(
    screen: Screen, scan: Scan, model: str, observable: str, result: FitResult, args: Namespace
) -> None:
    """Show one fit: chart and residuals first, so that the numbers end up where the eye is."""
    axis = next(axis for axis in scan.axes if not args.along or axis.parameter == args.along)
    if screen.terminal:
        screen.heading(*_title(scan, model, observable, axis.parameter, args))
        _draw(screen, scan, axis, observable, result)
        screen.heading("estimates", _counts(scan))
    columns = [
        Column("estimate"),
        Column("value", right=True),
        Column("unit"),
        Column("95 % interval"),
    ]
    screen.table(columns, estimates.rows(result.estimates, dict(args.fixed)), empty="no estimates")
    _verdict(screen, result)


def _draw(screen: Screen, scan: Scan, axis: Axis, observable: str, result: FitResult) -> None:
    """Draw data, curve and residuals."""
    points = points_of(scan.table(), [axis.parameter], [observable])
    if axis.low is None or axis.high is None or not points:
        return
    margin = (axis.high - axis.low) * 0.03
    step = (axis.high - axis.low + 2 * margin) / _DENSE
    dense = [axis.low - margin + step * index for index in range(_DENSE + 1)]
    curve = (dense, [float(value) for value in result.predict(dense)])
    unit = scan.units.get(observable, "") or ""
    chart = chart_of_points(points, axis, observable, unit, screen.width, _HEIGHT, screen.unicode, curve)
    screen.chart(chart.lines())
    fitted = [float(value) for value in result.predict([float(point.at[0]) for point in points])]
    residuals = [point.readings[observable].mean - value for point, value in zip(points, fitted, strict=True)]
    screen.chart(chart.residuals(residuals, "residuals, in units of their rms"))


def _counts(scan: Scan) -> str:
    """Return how many shots were used."""
    aside = f", {scan.set_aside} set aside left out" if scan.set_aside else ""
    return f"from {scan.shots} shots{aside}"


def _verdict(screen: Screen, result: FitResult) -> None:
    """Say whether to trust the fit, and what to do if not."""
    grave = [warning for warning in result.warnings if not warning.advisory]
    minor = [warning for warning in result.warnings if warning.advisory]
    if not screen.terminal:
        for warning in result.warnings:
            kind = "to know" if warning.advisory else "do not trust this"
            screen.say(f"{kind}: {warning.code}: {warning.message}")
        return
    if grave:
        screen.heading("DO NOT TRUST THIS FIT")
        for warning in grave:
            screen.item(warning.code, warning.message)
    if minor:
        screen.heading("to know")
        for warning in minor:
            screen.item(warning.code, warning.message)
    if not result.warnings:
        screen.note("no warnings")


def _show_slices(
    screen: Screen, scan: Scan, model: str, observable: str, parts: Sequence[Slice], args: Namespace
) -> None:
    """Show a line a slice."""
    screen.heading(*_title(scan, model, observable, args.along, args))
    others = [axis for axis in scan.axes if axis.parameter != args.along]
    names = list(parts[0].result.estimates) if parts else []
    units = {name: parts[0].result.estimates[name].unit for name in names}
    columns = [
        *(Column(_named(axis.parameter, axis.unit), right=True) for axis in others),
        *(Column(_named(name, units[name]), right=True, spare=rank) for rank, name in enumerate(names)),
        Column("trust", wraps=True),
    ]
    fixed = dict(args.fixed)
    rows: list[Row] = [
        [
            *(setting(part.where[axis.parameter]) for axis in others),
            *(
                estimates.value_text(estimate, fixed=name in fixed)
                for name, estimate in part.result.estimates.items()
            ),
            _trust(part.result),
        ]
        for part in parts
    ]
    screen.table(columns, rows, empty="no slices")
    doubted = [part for part in parts if not part.result.trusted]
    if doubted and screen.terminal:
        screen.heading(f"DO NOT TRUST {len(doubted)} of {len(parts)} slices")
        seen: dict[str, str] = {}
        for part in doubted:
            for warning in part.result.warnings:
                if not warning.advisory:
                    seen.setdefault(warning.code, warning.message)
        for code, message in seen.items():
            screen.item(code, message)


def _trust(result: FitResult) -> Cell:
    """Return whether to trust a slice."""
    if result.trusted:
        return Cell("yes")
    return Cell("NO, " + ", ".join(warning.code for warning in result.warnings if not warning.advisory))


def _named(name: str, unit: str | None) -> str:
    """Return a column's head: ``center (A)``."""
    return f"{name} ({unit})" if unit else name


def _entry(scan: Scan, model: str, observable: str, part: Slice, args: Namespace) -> dict[str, Any]:
    """Return one fit for JSON."""
    result = part.result
    return {
        "scan": scan.key,
        "model": model,
        "observable": observable,
        "along": args.along or (scan.axes[0].parameter if scan.axes else None),
        "slice": part.where,
        "estimates": {name: estimates.entry(estimate) for name, estimate in result.estimates.items()},
        "trusted": result.trusted,
        "warnings": [estimates.warning_entry(warning) for warning in result.warnings],
        "shots": scan.shots,
        "set_aside": scan.set_aside,
    }
