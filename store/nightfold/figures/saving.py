"""Writing figures to files, the same figure always to the same bytes."""

from __future__ import annotations

import os
import warnings
from pathlib import Path
from typing import TYPE_CHECKING

from nightfold.errors import RequestError
from nightfold.figures.style import style

if TYPE_CHECKING:
    from matplotlib.figure import Figure

FORMATS = ("png", "svg", "pdf")
_NO_TIME: dict[str, dict[str, None]] = {
    "png": {"Software": None},
    "svg": {"Date": None, "Creator": None},
    "pdf": {"CreationDate": None, "Creator": None, "Producer": None},
}


def save_figure(figure: Figure, path: str | os.PathLike[str]) -> None:
    """Write a figure to a file, replacing the file if there is one.

    Parameters
    ----------
    figure : matplotlib.figure.Figure
    path : path
        Its suffix says the format: ``.png``, ``.svg`` or ``.pdf``. In the last two, text stays text.

    Raises
    ------
    RequestError
        If the suffix is another one.
    OSError
        If the file cannot be written; what was there stays.

    Notes
    -----
    No time and no name of a program is written, so that the same figure gives the same bytes.
    """
    place = Path(path)
    kind = figure_format(place)
    part = place.with_name(f"{place.name}.part")
    try:
        with style(), warnings.catch_warnings():
            warnings.filterwarnings("ignore", message="Glyph .* missing from font")  # drawn as an empty box
            figure.savefig(part, format=kind, metadata=_NO_TIME[kind])
        part.replace(place)
    finally:
        part.unlink(missing_ok=True)


def figure_format(path: Path) -> str:
    """Return the format that the suffix of a file names.

    Raises
    ------
    RequestError
        If it names none.
    """
    kind = path.suffix.lower().removeprefix(".")
    if kind not in FORMATS:
        raise RequestError(f"{path}: found the suffix {path.suffix or '(none)'!r}, wanted .png, .svg or .pdf")
    return kind
