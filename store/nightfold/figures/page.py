"""The page of a figure: title, what not to trust, and room for panels and a column of text."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

from matplotlib.figure import Figure
from matplotlib.patches import Rectangle

from nightfold.figures.style import EDGE, INK, LINE, VERMILLION, WIDTH, lines_of, write_lines

if TYPE_CHECKING:
    from matplotlib.axes import Axes

_TITLE_CHARACTERS, _TEXT_CHARACTERS = 78, 112
_MOST_TITLE_LINES = 3


@dataclass(frozen=True)
class Page:
    """A figure with its heading drawn.

    Attributes
    ----------
    figure : Figure
    top : float
        Where the room below the heading begins, in inches from the top.
    height : float
        Of the figure, in inches.
    """

    figure: Figure
    top: float
    height: float

    def axes(self, left: float, top: float, width: float, height: float) -> Axes:
        """Return axes at a place in inches, from the left and below the heading."""
        below = self.height - self.top - top - height
        return self.figure.add_axes((left / WIDTH, below / self.height, width / WIDTH, height / self.height))


def make_page(
    title: str, detail: str, doubt: str, grave: Sequence[str], minor: Sequence[str], room: float
) -> Page:
    """Return a page with its heading.

    Parameters
    ----------
    title, detail : str
        What the figure shows; the second in plain type below the first.
    doubt : str
        The headline of the frame around `grave`.
    grave, minor : sequence of str
        What speaks against trusting it, in a frame; what is merely to be known.
    room : float
        Height left below the heading, in inches.
    """
    head = [line for line in lines_of(title, _TITLE_CHARACTERS) if line][:_MOST_TITLE_LINES]
    more = [line for line in lines_of(detail, _TEXT_CHARACTERS) if line][:_MOST_TITLE_LINES]
    framed = [line for text in grave for line in lines_of(text, _TEXT_CHARACTERS - 4)]
    known = [line for text in minor for line in lines_of(f"to know: {text}", _TEXT_CHARACTERS)]
    above = EDGE + 1.25 * LINE * len(head) + LINE * len(more)
    frame = LINE * (len(framed) + 2.1) if grave else 0.0
    top = above + frame + (0.06 if grave else 0.0) + LINE * len(known) + 0.1
    figure = Figure(figsize=(WIDTH, top + room), facecolor="white")
    at = write_lines(figure, [(line, {"fontsize": 10.0, "fontweight": "bold"}) for line in head], EDGE, EDGE)
    at = write_lines(figure, [(line, {}) for line in more], EDGE, at)
    if grave:
        _frame(figure, doubt, framed, above + 0.04, frame)
        at = above + 0.06 + frame
    write_lines(figure, [(line, {}) for line in known], EDGE, at + 0.02)
    return Page(figure, top, top + room)


def _frame(figure: Figure, headline: str, lines: Sequence[str], top: float, height: float) -> None:
    """Draw what speaks against the fit, framed, so that it is seen before the numbers are."""
    whole = figure.get_size_inches()[1]
    figure.add_artist(
        Rectangle(
            (EDGE / WIDTH, 1 - (top + height) / whole),
            1 - 2 * EDGE / WIDTH,
            height / whole,
            transform=figure.transFigure,
            facecolor="#FFF4EC",
            edgecolor=VERMILLION,
            linewidth=1.6,
            gid="doubt",
        )
    )
    looks = {"fontsize": 9.0, "fontweight": "bold", "color": INK}
    at = write_lines(figure, [(headline, looks)], 2 * EDGE, top + 0.06)
    write_lines(figure, [(line, {}) for line in lines], 2 * EDGE, at + 0.03)
