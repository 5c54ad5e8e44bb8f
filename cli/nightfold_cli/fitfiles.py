"""Figures of fits, written to files."""

from __future__ import annotations

from argparse import ArgumentParser, ArgumentTypeError
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from nightfold.fits.many import FitTable
    from nightfold.fits.result import FitResult
    from nightfold.scans.scan import Scan
    from nightfold.store import Store

_KINDS = (".png", ".svg", ".pdf")


@dataclass(frozen=True, slots=True)
class Drawn:
    """What a figure is of, beside the fit itself."""

    scan: Scan
    name: str
    observable: str
    along: str
    estimate: str | None
    relation: dict[str, Any]


def add_figure(parser: ArgumentParser) -> None:
    """Declare the options of figures."""
    parser.add_argument(
        "--figure",
        metavar="FILE",
        type=_figure_file,
        help="draw the fit into this file, NAME.png, .svg or .pdf; one a model",
    )
    parser.add_argument(
        "--estimate",
        metavar="NAME",
        help="compare, chart and map this one (default: what the model is about)",
    )


def _figure_file(text: str) -> Path:
    """Return the file to write; its kind and folder are looked at before any fit is done."""
    path = Path(text)
    if path.suffix.lower() not in _KINDS:
        raise ArgumentTypeError(f"found {text!r}, wanted a file NAME.png, NAME.svg or NAME.pdf")
    if path.is_dir() or not path.absolute().parent.is_dir():
        raise ArgumentTypeError(f"found {text!r}, wanted a file in a folder that is there")
    return path


def write_figures(
    store: Store, path: Path, fits: Sequence[tuple[str, FitResult | FitTable]], drawn: Drawn
) -> list[Path]:
    """Draw every fit and return the files: that one, or ``NAME-MODEL`` where there are several models."""
    from nightfold.figures import save_figure

    night = store.night_of([drawn.scan.first], machine=drawn.scan.machine)[0]
    written = []
    for model, outcome in fits:
        figure = _figure(model, outcome, drawn, f"{drawn.scan.machine}, night of {night}")
        place = path if len(fits) == 1 else path.with_name(f"{path.stem}-{model}{path.suffix}")
        save_figure(figure, place)
        written.append(place)
    return written


def _figure(model: str, outcome: FitResult | FitTable, drawn: Drawn, where: str) -> Figure:
    from nightfold.figures import fit_figure, slices_figure
    from nightfold.fits.principal import chosen_estimate
    from nightfold.fits.result import FitResult
    from nightfold.ledger.selecting import column_name

    under = "no background" if outcome.background == "none" else f"{outcome.background} background"
    related = " relative to reference shots" if drawn.relation["relative_to"] else ""
    detail = f"{where}; {drawn.observable}{related} along {drawn.along}, {under}"
    if not isinstance(outcome, FitResult):
        name = chosen_estimate(
            [*outcome.estimates, *outcome.derived], outcome.outcome.request, drawn.estimate
        )
        return slices_figure(outcome, estimate=name, title=f"{drawn.name}  {model}: {name}", detail=detail)
    table = drawn.scan.table(set_aside=True, observables=[drawn.observable], **drawn.relation)
    x, y = column_name(drawn.along), column_name(drawn.observable)
    aside = table["set_aside"].to_numpy(dtype=bool)
    left = table[aside]
    numeric = all(isinstance(value, int | float) for value in left[x])
    return fit_figure(
        outcome,
        title=f"{drawn.name}  {model}",
        detail=detail,
        x_name=drawn.along,
        y_name=drawn.observable + (" / reference" if related else ""),
        stderr=table[f"{y}_stderr"].to_numpy(dtype=float)[~aside],
        aside=(left[x].to_numpy(dtype=float), left[y].to_numpy(dtype=float)) if numeric else None,
    )
