"""``nightfold models``: what can be fitted."""

from __future__ import annotations

from argparse import ArgumentParser, Namespace
from typing import TYPE_CHECKING, Any

from nightfold_cli.layout import Cell, Column, Row
from nightfold_cli.render import Screen

if TYPE_CHECKING:
    from nightfold.fits.models.shape import LineShape

HELP = "list the models, or show one in full"
EXAMPLES = ("nightfold models", "nightfold models lorentzian")


def add_arguments(parser: ArgumentParser) -> None:
    """Declare the arguments."""
    parser.add_argument("name", metavar="NAME", nargs="?", help="show this model in full")


def run(args: Namespace) -> int:
    """List the models; needs no store."""
    from nightfold.fits.models import find_model, list_models

    screen = Screen.here(args.json)
    shapes = (find_model(args.name),) if args.name else list_models()
    if screen.json:
        screen.answer({"models": [_entry(shape) for shape in shapes]})
    elif args.name:
        _show(screen, shapes[0])
    else:
        _list(screen, shapes)
    return 0


def _list(screen: Screen, shapes: tuple[LineShape, ...]) -> None:
    """Draw two lines for each model."""
    if screen.terminal:
        for shape in shapes:
            names = ", ".join(parameter.name for parameter in shape.parameters)
            screen.heading(shape.name, names)
            screen.text(shape.formula, indent="    ")
            screen.text(f"background {shape.default_background}", indent="    ")
        screen.note(
            "\nAnother background: --background none, flat (+ offset) or sloped (+ offset + slope x)."
        )
        return
    heads = ("model", "formula", "parameters", "default_background")
    rows = [
        [
            shape.name,
            shape.formula,
            ", ".join(parameter.name for parameter in shape.parameters),
            shape.default_background,
        ]
        for shape in shapes
    ]
    screen.table([Column(name) for name in heads], rows, empty="no models")


def _show(screen: Screen, shape: LineShape) -> None:
    """Draw one model in full."""
    screen.heading(shape.name)
    screen.fields(
        [
            ("formula", shape.formula),
            ("default background", shape.default_background),
            ("source", shape.source),
        ]
    )
    columns = [Column("parameter"), Column("meaning", wraps=True), Column("unit")]
    rows: list[Row] = [
        [part.name, part.meaning, Cell(_unit(part.unit), part.unit)] for part in shape.parameters
    ]
    rows += [["offset", "background: flat, sloped", "y"], ["slope", "background: sloped", "y/x"]]
    screen.table(columns, rows, empty="no parameters")
    if shape.derived:
        columns = [Column("derived"), *columns[1:]]
        rows = [[part.name, part.meaning, Cell(_unit(part.unit), part.unit)] for part in shape.derived]
        screen.table(columns, rows, empty="none")
    screen.note("x is what is swept, y the observable")


def _unit(pattern: str) -> str:
    """Return the unit of a parameter as a pattern of x and y."""
    return pattern or "-"


def _entry(shape: LineShape) -> dict[str, Any]:
    """Return a model for JSON."""
    return {
        "name": shape.name,
        "formula": shape.formula,
        "parameters": [
            {"name": part.name, "meaning": part.meaning, "unit": part.unit} for part in shape.parameters
        ],
        "derived": [
            {"name": part.name, "meaning": part.meaning, "unit": part.unit} for part in shape.derived
        ],
        "default_background": shape.default_background,
        "source": shape.source,
    }
