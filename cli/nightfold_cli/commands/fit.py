"""``nightfold fit KEY MODEL… -o OBSERVABLE``: fit models to a scan."""

from __future__ import annotations

import math
import shlex
import sys
from argparse import ArgumentParser, Namespace
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

from nightfold.concise import rounded
from nightfold_cli import estimates
from nightfold_cli.arguments import add_relative, add_scan_key, named_number, relation
from nightfold_cli.charts import chart_of_points
from nightfold_cli.failures import UsageError
from nightfold_cli.fitfiles import Drawn, add_figure, write_figures
from nightfold_cli.known import drawn_together
from nightfold_cli.layout import Column, Row
from nightfold_cli.naming import name_in, named_scan
from nightfold_cli.opening import opened
from nightfold_cli.plots import Label
from nightfold_cli.points import points_of
from nightfold_cli.progress import Progress
from nightfold_cli.refits import add_again, fit_again
from nightfold_cli.render import Screen
from nightfold_cli.runs import Runs, runs_of
from nightfold_cli.scantext import counted, title
from nightfold_cli.settings import setting
from nightfold_cli.sidebyside import compare, comparison_entry, show_comparison
from nightfold_cli.slices import Slice, parts_of, show_slices

if TYPE_CHECKING:
    from nightfold.fits.many import FitTable
    from nightfold.fits.result import FitResult
    from nightfold.scans.scan import Scan
    from nightfold.store import Store

HELP = "fit models to a scan, with intervals and warnings"
EXAMPLES = (
    "nightfold fit loss-coarse lorentzian -o atom_number",
    "nightfold fit loss-map lorentzian -o atom_number --along coil_current",
    "nightfold fit decay exponential two-body -o atom_number --fixed amplitude=1.2e5",
    "nightfold fit loss-coarse lorentzian -o atom_number --relative-to reference",
    "nightfold fit loss-coarse lorentzian gaussian -o atom_number --figure loss.pdf",
    "nightfold fit --again",
)
_HEIGHT = 15
_DENSE = 600
_PATTERN = "No warnings, but the residuals follow a pattern: the curve may not be of this shape."


def add_arguments(parser: ArgumentParser) -> None:
    """Declare the arguments."""
    key = add_scan_key(parser)
    models = parser.add_argument("models", metavar="MODEL", nargs="+", help="'nightfold models' lists them")
    add_again(parser, key, models)
    parser.add_argument("-o", "--observable", metavar="NAME", help="default: the machine's main one")
    parser.add_argument("--along", metavar="PARAMETER", help="the axis to fit along, where there are several")
    parser.add_argument("--background", choices=("none", "flat", "sloped"), help="default: that of the model")
    parser.add_argument("--plain", action="store_true", help="equal weights and no robust step")
    for name, help_line in (("--fixed", "hold a parameter"), ("--start", "where to begin")):
        parser.add_argument(
            name, metavar="NAME=VALUE", type=named_number, action="append", default=[], help=help_line
        )
    add_relative(parser)
    add_figure(parser)
    parser.add_argument("--no-keep", action="store_true", help="do not keep the fit in the store")


def run(args: Namespace) -> int:
    """Fit every model, show them one below the other."""
    screen = Screen.here(args.json)
    if args.again is not None:
        return fit_again(args, screen)
    with opened(args, screen) as store:
        scan = named_scan(store, args.key, screen)
        name = name_in(store, scan)
        observable = _observable(scan, args.observable)
        along = args.along or (scan.axes[0].parameter if scan.axes else "")
        outcomes = [(model, _fit(store, scan, model, observable, args)) for model in args.models]
        fits = [(model, parts_of(outcome)) for model, outcome in outcomes]
        compared = compare(fits, args.estimate)
        files = _files(store, scan, title(scan, name), outcomes, observable, along, args)
        if screen.json:
            from nightfold.fits.scanfit import count_left_out

            aside = count_left_out(scan, along)
            entries = [
                _entry(name, observable, part, along, _of_slice(aside, part.where), args.relative_to)
                for _, parts in fits
                for part in parts
            ]
            comparison = [comparison_entry(each) for each in compared]
            screen.answer(
                {"fits": entries, "comparison": comparison, "figures": [str(each) for each in files]}
            )
            return 0
        if screen.terminal:
            for model, parts in fits:
                if len(scan.axes) > 1:
                    heading = _title(scan, name, model, observable, along, _background(parts), args)
                    show_slices(screen, scan, heading, parts, dict(args.fixed), args.estimate)
                else:
                    _show(screen, scan, name, model, observable, parts[0].result, args)
            show_comparison(screen, compared)
        else:
            _tabulate(screen, fits)
        for file in files:
            screen.note(f"figure written to {file}")
    return 0


def _files(
    store: Store,
    scan: Scan,
    name: str,
    outcomes: Sequence[tuple[str, FitResult | FitTable]],
    observable: str,
    along: str,
    args: Namespace,
) -> list[Path]:
    """Draw figures, if they are asked for."""
    if args.figure is None:
        return []
    drawn = Drawn(scan, name, observable, along, args.estimate, relation(args))
    return write_figures(store, args.figure, outcomes, drawn)


def _observable(scan: Scan, asked: str | None) -> str:
    """Return the observable to fit."""
    found = drawn_together(scan, asked)
    if not found:
        raise UsageError(f"scan {scan.key}: it has no observable yet, so there is nothing to fit")
    if len(found) > 1:
        named = " or ".join(f"-o {shlex.quote(name)}" for name in found)
        raise UsageError(
            f"scan {scan.key}: {asked or 'its main observable'} has several clouds; name one: {named}"
        )
    return found[0]


def _fit(store: Store, scan: Scan, model: str, observable: str, args: Namespace) -> FitResult | FitTable:
    """Fit one model."""
    with Progress(f"fitting {model}", 0, sys.stderr):
        return store.fit(
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
            **relation(args),
        )


def _tabulate(screen: Screen, fits: Sequence[tuple[str, list[Slice]]]) -> None:
    """Write a line an estimate, for programs; warnings go to stderr."""
    heads = ("model", "slice", "estimate", "value", "stderr", "unit", "low95", "high95", "trusted")
    rows: list[Row] = []
    for model, parts in fits:
        for part in parts:
            where = ", ".join(f"{name} {setting(value)}" for name, value in part.where.items())
            trusted = setting(part.result.trusted)
            rows += [[model, where, *row, trusted] for row in estimates.plain_rows(part.result.estimates)]
            for warning in part.result.warnings:
                kind = "to know" if warning.advisory else "do not trust this"
                screen.say(
                    f"{model}{' at ' + where if where else ''}: {kind}: {warning.code}: {warning.message}"
                )
    screen.table([Column(head) for head in heads], rows, empty="no estimates")


def _title(
    scan: Scan, name: str, model: str, observable: str, along: str, background: str, args: Namespace
) -> tuple[str, str]:
    """Return what was fitted to what."""
    under = "no background" if background == "none" else f"{background} background"
    related = " relative to reference shots" if args.relative_to else ""
    return f"{title(scan, name)}  {model}", f"{observable}{related} along {along}, {under}"


def _show(
    screen: Screen, scan: Scan, name: str, model: str, observable: str, result: FitResult, args: Namespace
) -> None:
    """Show one fit: chart and residuals first, so that the numbers end up where the eye is."""
    along = args.along or scan.axes[0].parameter
    screen.heading(*_title(scan, name, model, observable, along, result.background, args))
    runs = _draw(screen, scan, along, observable, result, args)
    screen.heading("estimates", _counts(scan, result))
    screen.table(
        estimates.ON_SCREEN, estimates.rows(result.estimates, dict(args.fixed)), empty="no estimates"
    )
    if result.derived:
        screen.note(f"derived: {estimates.sentence(result.derived)}")
    if result.shared_stderr:
        screen.note(estimates.shared_text(result.shared_stderr, result.free_names))
    _verdict(screen, result, runs)


def _draw(
    screen: Screen, scan: Scan, along: str, observable: str, result: FitResult, args: Namespace
) -> Runs | None:
    """Draw data, curve and residuals; return the runs of signs of these."""
    whole = scan.table(observables=[observable], **relation(args))
    table = whole.drop(index=whole.index[list(result.outliers)])
    points = points_of(table, [along], [observable])
    if len(points) < 2 or not all(isinstance(point.at[0], int | float) for point in points):
        return None
    low, high = float(points[0].at[0]), float(points[-1].at[0])
    margin = (high - low) * 0.03
    step = (high - low + 2 * margin) / _DENSE
    dense = [low - margin + step * index for index in range(_DENSE + 1)]
    curve = (dense, [float(value) for value in result.predict(dense)])
    x, y = (Label(name, table.attrs["units"].get(name) or "") for name in (along, observable))
    outliers = list(zip(result.outlier_x.tolist(), result.outlier_y.tolist(), strict=True))
    chart = chart_of_points(points, x, y, screen.width, _HEIGHT, screen.unicode, curve, outliers=outliers)
    screen.chart(chart.lines())
    fitted = [float(value) for value in result.predict([float(point.at[0]) for point in points])]
    residuals = [point.readings[observable].mean - value for point, value in zip(points, fitted, strict=True)]
    screen.chart(chart.residuals(residuals, "residuals, in units of their rms"))
    runs = runs_of(residuals)
    screen.chart([[(_summary(residuals, y.unit, runs), "label")]])
    screen.note(chart.legend)
    if beyond := len(points) + len(outliers) - len(chart.points.x):
        screen.note(f"{counted(beyond, 'outlier')} beyond the chart")
    return runs


def _summary(residuals: Sequence[float], unit: str, runs: Runs | None) -> str:
    """Return how large residuals are, and how often they change sign."""
    finite = [value for value in residuals if math.isfinite(value)]
    rms = math.hypot(*finite) / math.sqrt(len(finite)) if finite else math.nan
    said = f"rms {rounded(rms)} {unit}".rstrip()
    if runs is None:
        return said
    return (
        f"{said}, {counted(runs.count, 'run')} of signs in {counted(runs.points, 'point')}"
        f" (about {runs.expected:.0f} expected)"
    )


def _background(parts: Sequence[Slice]) -> str:
    """Return the background of the fits of slices."""
    return parts[0].result.background if parts else "none"


def _counts(scan: Scan, result: FitResult) -> str:
    """Return how many shots were used."""
    aside = f", {scan.set_aside} set aside" if scan.set_aside else ""
    missing = scan.shots - result.n - len(result.outliers)
    left = f", {counted(len(result.outliers), 'outlier')} left out" if result.outliers else ""
    return f"from {counted(result.n, 'shot')}{left}{aside}" + (
        f", {missing} without a value" if missing else ""
    )


def _verdict(screen: Screen, result: FitResult, runs: Runs | None) -> None:
    """Say whether to trust the fit, and what to do if not."""
    grave = [warning for warning in result.warnings if not warning.advisory]
    minor = [warning for warning in result.warnings if warning.advisory]
    if grave:
        screen.heading("DO NOT TRUST THIS FIT")
        for warning in grave:
            screen.item(warning.code, warning.message)
    if minor:
        screen.heading("to know")
        for warning in minor:
            screen.item(warning.code, warning.message)
    if not result.warnings:
        screen.gap()
        if runs is not None and runs.patterned:
            screen.text(_PATTERN)
        else:
            screen.text("No warnings; the residuals have a say too.")


def _of_slice(counts: Sequence[tuple[dict[str, Any], int]], where: dict[str, Any]) -> int:
    """Return the count of the slice with these values."""
    return next((count for values, count in counts if values == where), 0)


def _entry(
    scan: str, observable: str, part: Slice, along: str, aside: int, relative_to: str | None
) -> dict[str, Any]:
    """Return one fit for JSON."""
    result = part.result
    return {
        "scan": scan,
        "model": result.model,
        "background": result.background,
        "observable": observable,
        "along": along,
        "relative_to": relative_to,
        "slice": part.where,
        "estimates": {name: estimates.entry(estimate) for name, estimate in result.estimates.items()},
        "derived": {name: estimates.entry(number) for name, number in result.derived.items()},
        "shared_stderr": result.shared_stderr,
        "trusted": result.trusted,
        "warnings": [estimates.warning_entry(warning) for warning in result.warnings],
        "shots": result.n,
        "set_aside": aside,
    }
