"""Charts in the terminal: points with their scatter, a fitted curve, residuals, a small trend.

Shapes carry the meaning (``●`` data, ``○`` a second series, ``×`` flagged, fine dots the curve), so nothing is lost
without colour.
The functions return lines made of runs of text with a role; what a role looks like is for `render` to say.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field

from nightfold_cli.canvas import ASCII, UNICODE, Canvas, Glyphs, Line, Role
from nightfold_cli.ticks import Ticks, ticks_between

_LABELS = 9
_PADDING = 0.04


@dataclass(frozen=True, slots=True)
class Points:
    """Data points of a chart.

    Attributes
    ----------
    x, y : sequence of float
        Positions; points that are not finite are left out.
    spread : sequence of float
        Half the length of the bar through each point; 0 or nan for none.
    low, high : sequence of float
        Ends of the bars, where they are not as far below as above.
    flagged : sequence of bool
        Points drawn as a cross.
    name : str
        What they are, where a chart has several series.
    """

    x: Sequence[float]
    y: Sequence[float]
    spread: Sequence[float] = ()
    flagged: Sequence[bool] = ()
    low: Sequence[float] = ()
    high: Sequence[float] = ()
    name: str = ""

    def bars(self) -> list[tuple[float, float, float]]:
        """Return x, lower and upper end of every bar that has some length."""
        if self.low:
            bars = list(zip(self.x, self.low, self.high, strict=True))
        else:
            bars = [(x, y - half, y + half) for x, y, half in zip(self.x, self.y, self.spread, strict=False)]
        return [(x, low, high) for x, low, high in bars if _finite(x, low, high) and high > low]


@dataclass(frozen=True, slots=True)
class Label:
    """Name and unit of an axis."""

    name: str
    unit: str = ""


@dataclass(frozen=True, slots=True)
class Frame:
    """The rectangle of numbers that a canvas shows.

    Attributes
    ----------
    low_x, high_x, low_y, high_y : float
        Ends of the axes.
    """

    low_x: float
    high_x: float
    low_y: float
    high_y: float

    @property
    def drawable(self) -> bool:
        """Whether a float holds how far the ends are apart."""
        return _finite(self.high_x - self.low_x, self.high_y - self.low_y)

    def dot(self, canvas: Canvas, x: float, y: float) -> tuple[int, int]:
        """Return the dot of a position."""
        across = (x - self.low_x) / (self.high_x - self.low_x) * (canvas.dots_across - 1)
        down = (self.high_y - y) / (self.high_y - self.low_y) * (canvas.dots_down - 1)
        return round(across), round(down)

    def cell(self, canvas: Canvas, x: float, y: float) -> tuple[int, int]:
        """Return the cell of a position."""
        across, down = self.dot(canvas, x, y)
        return (across // 2, down // 4) if canvas.fine else (across, down)


@dataclass(frozen=True, slots=True)
class Chart:
    """A chart of points and, if there is one, a curve through them.

    Attributes
    ----------
    points : Points
        The data.
    curve : tuple of two sequences of float, optional
        x (rising, dense) and y of a curve.
    x, y : Label
        What the axes show.
    width, height : int
        Size in characters, labels included.
    unicode : bool
        Whether braille and other signs beyond ASCII may be used.
    others : sequence of Points
        Further series on the same axes, at most three, told apart by their marks.
    ticks : callable
        Ticks of the x axis between two ends, at most so many.
    around : float, optional
        How much of the x axis is shown on either side where all points lie at one place.
    """

    points: Points
    x: Label
    y: Label
    width: int = 78
    height: int = 15
    curve: tuple[Sequence[float], Sequence[float]] | None = None
    unicode: bool = True
    others: Sequence[Points] = ()
    ticks: Callable[[float, float, int], Ticks] = ticks_between
    around: float | None = None
    glyphs: Glyphs = field(init=False)

    def __post_init__(self) -> None:
        object.__setattr__(self, "glyphs", UNICODE if self.unicode else ASCII)

    def lines(self) -> list[Line]:
        """Return the chart, top line first; a single line where there is nothing that can be drawn."""
        frame = self.frame()
        if frame is None:
            return [[("(nothing finite to draw)", "label")]]
        if not frame.drawable:
            return [[("(numbers too far apart to draw)", "label")]]
        canvas = self._canvas(self.height - 3)
        if self.curve is not None:
            _draw_curve(canvas, frame, *self.curve)
        _draw_points(canvas, frame, self._series, self.glyphs)
        across = self.ticks(frame.low_x, frame.high_x, max(2, canvas.width // 10))
        up = ticks_between(frame.low_y, frame.high_y, max(2, canvas.height // 2))
        rows = {
            frame.cell(canvas, frame.low_x, at)[1]: name
            for at, name in zip(up.positions, up.labels, strict=True)
        }
        body = [_margin(rows.get(row, ""), self.glyphs) + canvas.line(row) for row in range(canvas.height)]
        return [
            [(up.title(self.y.name, self.y.unit), "label")],
            *body,
            *self._below(canvas, frame, across),
        ]

    def residuals(self, values: Sequence[float], title: str, height: int = 5) -> list[Line]:
        """Return a strip of residuals below the same x axis, in units of their root mean square.

        Parameters
        ----------
        values : sequence of float
            Data minus curve, one for each point but those flagged at the end.
        title : str
            What is written above the strip.
        height : int
            Rows of the strip, odd.
        """
        frame = self.frame()
        finite = [value for value in values if math.isfinite(value)]
        if frame is None or not finite or not frame.drawable:
            return []
        scatter = math.hypot(*finite) / math.sqrt(len(finite)) or 1.0
        reach = max(3.0, *(abs(value) / scatter for value in finite))
        strip = Frame(frame.low_x, frame.high_x, -reach, reach)
        canvas = self._canvas(height)
        middle = height // 2
        for column in range(canvas.width):
            canvas.put(column, middle, self.glyphs.zero, "axis")
        scaled = Points(self.points.x[: len(values)], [value / scatter for value in values])
        _draw_points(canvas, strip, (scaled,), self.glyphs)
        names = {0: f"+{reach:.1f}", middle: "0", height - 1: f"-{reach:.1f}"}
        return [
            [(title, "label")],
            *(_margin(names.get(row, ""), self.glyphs) + canvas.line(row) for row in range(height)),
        ]

    @property
    def legend(self) -> str:
        """Return what the marks mean."""
        marks = [f"{self.glyphs.mark} mean", f"{self.glyphs.bar} one stderr either way"]
        if self.others:
            names = zip(self.glyphs.marks, self._series, strict=False)
            bars = " and ".join(dict.fromkeys(self.glyphs.bars[: len(self._series)]))
            marks = [
                *(f"{mark} {one.name}" for mark, one in names),
                f"{bars} one stderr either way of the mean",
            ]
        if any(self.points.flagged):
            marks.append(f"{self.glyphs.flagged} outlier, not used")
        if self.curve is not None:
            marks.append("fine dots: the fit")
        return ", ".join(marks)

    def frame(self) -> Frame | None:
        """Return the rectangle that holds all points and the curve, None where nothing is finite."""
        every = [pair for one in self._series for pair in zip(one.x, one.y, strict=True)]
        kept = [(x, y) for x, y in every if _finite(x, y)]
        if not kept:
            return None
        xs, ys = [x for x, _ in kept], [y for _, y in kept]
        ys += [end for one in self._series for _, low, high in one.bars() for end in (low, high)]
        if self.curve is not None:
            ys += [y for y in self.curve[1] if math.isfinite(y)]
        return Frame(*_widened(min(xs), max(xs), self.around), *_widened(min(ys), max(ys)))

    @property
    def _series(self) -> tuple[Points, ...]:
        """Return all series of points."""
        return (self.points, *self.others)

    def _canvas(self, height: int) -> Canvas:
        """Return an empty canvas beside the labels of the y axis."""
        return Canvas(max(10, self.width - _LABELS - 1), height, fine=self.unicode)

    def _below(self, canvas: Canvas, frame: Frame, across: Ticks) -> list[Line]:
        """Return the x axis: its line, its labels, its title."""
        axis, names = [self.glyphs.horizontal] * canvas.width, [" "] * (canvas.width + _LABELS)
        for at, name in zip(across.positions, across.labels, strict=True):
            column = frame.cell(canvas, at, frame.low_y)[0]
            axis[min(column, canvas.width - 1)] = self.glyphs.below
            start = max(0, min(column + 1 + _LABELS - len(name) // 2, len(names) - len(name)))
            names[start : start + len(name)] = name
        title = across.title(self.x.name, self.x.unit)
        return [
            [(" " * _LABELS + self.glyphs.corner + "".join(axis), "axis")],
            [("".join(names).rstrip(), "label")],
            [(" " * _LABELS + " " + title, "label")],
        ]


def shading(rows: Sequence[Sequence[float]], *, unicode: bool = True) -> list[str]:
    """Return a map of values as shades, two characters a cell; ``??`` where there is no value."""
    shades = (UNICODE if unicode else ASCII).shades
    finite = [value for row in rows for value in row if math.isfinite(value)]
    if not finite:
        return []
    low, span = min(finite), max(finite) / 2 - min(finite) / 2 or 1.0

    def cell(value: float) -> str:
        if not math.isfinite(value):
            return "??"
        return shades[min(len(shades) - 1, int((value / 2 - low / 2) / span * len(shades)))] * 2

    return ["".join(cell(value) for value in row) for row in rows]


def _draw_curve(canvas: Canvas, frame: Frame, x: Sequence[float], y: Sequence[float]) -> None:
    """Draw a dense curve as dots, without gaps on steep flanks."""
    last: tuple[int, int] | None = None
    for at, value in zip(x, y, strict=True):
        if not _finite(at, value):
            last = None
            continue
        across, down = frame.dot(canvas, at, value)
        start = last[1] if last and last[0] != across else down
        for step in range(min(start, down), max(start, down) + 1):
            canvas.dot(across, step)
        last = (across, down)


def _draw_points(canvas: Canvas, frame: Frame, series: Sequence[Points], glyphs: Glyphs) -> None:
    """Draw the bars of all points, then their marks on top; every other series in a lighter tone."""
    tones: tuple[Role, ...] = ("data", "plain", "data", "plain")
    for bar, tone, points in zip(glyphs.bars, tones, series, strict=False):
        for x, low, high in points.bars():
            column, top = frame.cell(canvas, x, high)
            for row in range(top, frame.cell(canvas, x, low)[1] + 1):
                canvas.put(column, row, bar, tone)
    for mark, tone, points in zip(glyphs.marks, tones, series, strict=False):
        flagged = list(points.flagged) or [False] * len(points.x)
        for x, y, cross in zip(points.x, points.y, flagged, strict=True):
            if _finite(x, y):
                canvas.put(*frame.cell(canvas, x, y), glyphs.flagged if cross else mark, tone)


def _margin(label: str, glyphs: Glyphs) -> Line:
    """Return the y axis of one row."""
    return [
        (label.rjust(_LABELS - 1)[: _LABELS - 1] + " ", "label"),
        (glyphs.tick if label else glyphs.vertical, "axis"),
    ]


def _widened(low: float, high: float, around: float | None = None) -> tuple[float, float]:
    """Return ends a little beyond the given ones, always apart: equal ones by `around`, or a share of them."""
    span = high - low
    margin = span * _PADDING if span > 0 else around or abs(low) * 0.05 or 1.0
    return low - margin, high + margin


def _finite(*numbers: float) -> bool:
    """Return whether all numbers are finite."""
    return all(math.isfinite(number) for number in numbers)
