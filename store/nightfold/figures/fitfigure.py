"""The figure of one fit: shots, curve with its band, residuals, estimates, and what not to trust."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike

from nightfold.concise import NOT_DETERMINED, asymmetric, interval, plain
from nightfold.figures.page import Page, make_page
from nightfold.figures.shots import Floats, Marks, Shots, gather
from nightfold.figures.style import (
    BLUE,
    FAINT,
    INK,
    LINE,
    PALE_BLUE,
    VERMILLION,
    WIDTH,
    label_axis,
    lines_of,
    plain_axes,
    style,
    write_lines,
)

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from nightfold.fits.result import FitResult

LEVEL_68, LEVEL_95 = 0.6827, 0.95
_DENSE = 1200
_LEFT, _PLOT, _COLUMN = 0.8, 3.98, 4.98
_MAIN, _GAP, _STRIP, _BELOW = 2.75, 0.14, 0.85, 0.5
_CHARACTERS = 30
_BARS: dict[str, Any] = {"capsize": 0, "elinewidth": 0.9, "linestyle": "none"}


@dataclass(frozen=True)
class _Look:
    """How one kind of shot is drawn, and what the key calls it."""

    name: str
    looks: dict[str, Any]


_SINGLE = _Look("one shot", {"marker": "o", "ms": 3.2, "mfc": "none", "mec": FAINT, "mew": 0.7})
_MEAN = _Look("mean, ± 1 stderr", {"marker": "o", "ms": 4.2, "color": INK, "mew": 0.7})
_ALONE = _Look("one shot, ± 1 stderr", _MEAN.looks)
_OUTLIER = _Look("outlier, not used", {"marker": "x", "ms": 6.5, "color": VERMILLION, "mew": 1.7})
_ASIDE = _Look("set aside", {"marker": "d", "ms": 4.0, "mfc": "none", "mec": "#B5B5B5", "mew": 0.7})


def fit_figure(
    result: FitResult,
    *,
    title: str = "",
    detail: str = "",
    x_name: str = "x",
    y_name: str = "y",
    stderr: ArrayLike | None = None,
    aside: tuple[ArrayLike, ArrayLike] | None = None,
) -> Figure:
    """Return a figure of a fit, for print: single shots and means, curve with its 68 % band, residuals, estimates.

    Parameters
    ----------
    result : FitResult
    title, detail : str
        Above the figure; the second in plain type. By default the model and its background.
    x_name, y_name : str
        Names of the axes; the units are those of the fit.
    stderr : (n,) float array, optional
        Of the points handed in to the fit, those not used too. Bars are of this where nothing better is known: first
        comes the scatter that the fit learnt, then that of repeated shots, pooled.
    aside : tuple of two arrays, optional
        x and y of shots that are set aside; drawn faint.

    Returns
    -------
    matplotlib.figure.Figure
        `save_figure` writes it to a file.

    Raises
    ------
    FitError
        When there is not a stderr for each point handed in to the fit.
    """
    shots = gather(result, stderr, aside)
    with style():
        column = _estimates(result)
        keys = 5.5 * LINE
        room = max(
            _MAIN + _GAP + _STRIP + _BELOW,
            LINE * len(column) + keys + (2.0 if shots.repeated else 1.0) * LINE,
        )
        page = make_page(
            title or f"{result.model}, {_background(result)}",
            detail,
            "DO NOT TRUST THIS FIT",
            [f"{item.code}: {item.message}" for item in result.warnings if not item.advisory],
            [f"{item.code}: {item.message}" for item in result.warnings if item.advisory],
            room,
        )
        main = page.axes(_LEFT, 0.0, _PLOT, room - _GAP - _STRIP - _BELOW)
        strip = page.axes(_LEFT, room - _STRIP - _BELOW, _PLOT, _STRIP)
        _draw_main(main, result, shots)
        _draw_residuals(strip, main, result, shots)
        _name_axes(main, strip, result, x_name, y_name)
        end = write_lines(page.figure, column, _COLUMN, page.top)
        _key(page, result, main, shots, end + LINE)
        page.figure.align_ylabels([main, strip])
    return page.figure


def _background(result: FitResult) -> str:
    return "no background" if result.background == "none" else f"{result.background} background"


def _draw_main(axes: Axes, result: FitResult, shots: Shots) -> None:
    """Draw the shots and the curve."""
    ends = _ends(shots)
    dense = np.linspace(*ends, _DENSE)
    curve = result.predict(dense)
    low, high = result.band(dense, LEVEL_68)
    bottom, top = _limits(shots, curve)
    axes.set_xlim(*ends)
    axes.set_ylim(bottom, top)
    axes.fill_between(dense, low, high, color=PALE_BLUE, linewidth=0, zorder=1, label="band")
    dashed: dict[str, Any] = {} if result.trusted else {"dashes": (5, 2)}
    axes.plot(dense, curve, color=BLUE, linewidth=1.2, zorder=3, label="curve", **dashed)
    _draw_marks(axes, shots, shots.single, shots.means, shots.outliers, shots.aside)
    plain_axes(axes)
    axes.tick_params(labelbottom=False)


def _draw_marks(axes: Axes, shots: Shots, single: Marks, means: Marks, outliers: Marks, aside: Marks) -> None:
    """Draw all kinds of shots; what lies beyond the axes is a triangle at their edge."""
    if shots.repeated:
        axes.plot(single.x, single.y, linestyle="none", zorder=2, label="single", **_SINGLE.looks)
    axes.errorbar(means.x, means.y, means.bar, zorder=4, label="means", **_MEAN.looks, **_BARS)
    for marks, look, label in ((aside, _ASIDE, "aside"), (outliers, _OUTLIER, "outliers")):
        if not len(marks):
            continue
        bottom, top = axes.get_ylim()
        inside = (marks.y >= bottom) & (marks.y <= top)
        axes.plot(marks.x[inside], marks.y[inside], linestyle="none", zorder=5, label=label, **look.looks)
        color = look.looks.get("color", look.looks.get("mec"))
        for beyond, edge, shape in ((marks.y > top, top, "^"), (marks.y < bottom, bottom, "v")):
            at, looks = marks.x[beyond], _beyond(color)
            if len(at):
                axes.plot(at, np.full(len(at), edge), shape, label=f"{label} beyond", **looks)


def _beyond(color: Any) -> dict[str, Any]:
    return {"ms": 6, "color": color, "clip_on": False, "zorder": 6}


def _draw_residuals(axes: Axes, main: Axes, result: FitResult, shots: Shots) -> None:
    """Draw shots less curve below the same x axis."""
    single, means, outliers = (_less(result, marks) for marks in (shots.single, shots.means, shots.outliers))
    reach = max([*np.abs(single.y), *(np.abs(means.y) + np.nan_to_num(means.bar))], default=1.0) or 1.0
    axes.set_xlim(*main.get_xlim())
    axes.set_ylim(-1.15 * reach, 1.15 * reach)
    dense = np.linspace(*main.get_xlim(), _DENSE)
    low, high = (end - result.predict(dense) for end in result.band(dense, LEVEL_68))
    axes.fill_between(dense, low, high, color=PALE_BLUE, linewidth=0, zorder=0)
    axes.axhline(0.0, color=BLUE, linewidth=0.9, zorder=1)
    nothing = Marks(np.empty(0), np.empty(0), np.empty(0))
    _draw_marks(axes, shots, single, means, outliers, nothing)
    plain_axes(axes)
    axes.locator_params(axis="y", nbins=4)


def _less(result: FitResult, marks: Marks) -> Marks:
    return Marks(marks.x, marks.y - result.predict(marks.x), marks.bar)


def _name_axes(main: Axes, strip: Axes, result: FitResult, x_name: str, y_name: str) -> None:
    """Name the axes; the name of the strip, which is low, takes two lines."""
    label_axis(main.yaxis, y_name, result.request.unit_y)
    label_axis(strip.yaxis, "residual", result.request.unit_y)
    label_axis(strip.xaxis, x_name, result.request.unit_x)
    strip.set_ylabel(strip.get_ylabel().replace(" (", "\n("))


def _ends(shots: Shots) -> tuple[float, float]:
    """Return the ends of the x axis, a little beyond the shots."""
    x = np.concatenate([shots.single.x, shots.outliers.x, shots.aside.x])
    low, high = (float(x.min()), float(x.max())) if len(x) else (0.0, 1.0)
    margin = 0.025 * (high - low) or abs(low) * 0.05 or 1.0
    return low - margin, high + margin


def _limits(shots: Shots, curve: Floats) -> tuple[float, float]:
    """Return the ends of the y axis: all shots used and the curve, and the others where they are not far off."""
    bars = np.nan_to_num(shots.means.bar)
    used = np.concatenate([shots.single.y, shots.means.y - bars, shots.means.y + bars])
    low, high = (float(used.min()), float(used.max())) if len(used) else (0.0, 1.0)
    span = (high - low) or abs(low) or 1.0
    for values in (curve, shots.outliers.y, shots.aside.y):
        near = values[(values > low - span) & (values < high + span)]
        if len(near):
            low, high = min(low, float(near.min())), max(high, float(near.max()))
    margin = 0.05 * ((high - low) or span)
    return low - margin, high + margin


def _estimates(result: FitResult) -> list[tuple[str, dict[str, Any]]]:
    """Return the column of numbers: each estimate with its unit, and its 95 % interval."""
    head = "estimates" if result.trusted else "estimates, not trusted"
    lines: list[tuple[str, dict[str, Any]]] = [(head, {"fontsize": 9.0, "fontweight": "bold"})]
    for name, estimate in result.estimates.items():
        lines += [(line, {"color": "#444444"}) for line in lines_of(name, _CHARACTERS)]
        fixed = name in result.settings["fixed"]
        value = f"{plain(estimate.value)} {estimate.unit}, fixed" if fixed else _value(estimate)
        lines += [(f"  {line}", {"fontsize": 9.0}) for line in lines_of(value, _CHARACTERS - 3)]
        if not fixed and math.isfinite(estimate.stderr):
            ends = interval(*estimate.interval(LEVEL_95), estimate.value, estimate.stderr)
            lines += [(f"  {line}", {}) for line in lines_of(f"95 %: {ends}", _CHARACTERS)]
    points = f"{result.n} shot{'' if result.n == 1 else 's'}, {result.dof} degrees of freedom"
    return [*lines, ("", {"fontsize": 4.0}), (points, {"color": "#444444"})]


def _value(estimate: Any) -> str:
    if not math.isfinite(estimate.stderr):
        return NOT_DETERMINED
    value = asymmetric(estimate.value, estimate.stderr, *estimate.interval(LEVEL_68))
    return value if value == NOT_DETERMINED else f"{value} {estimate.unit}".strip()


def _key(page: Page, result: FitResult, axes: Axes, shots: Shots, top: float) -> None:
    """Explain the marks in the column, so that they hide nothing."""
    drawn: dict[object, Any] = {artist.get_label(): artist for artist in axes.get_children()}
    drawn |= {container.get_label(): container for container in axes.containers}
    names = {
        "single": _SINGLE.name,
        "means": _MEAN.name if shots.repeated else _ALONE.name if _has_bars(shots) else "one shot",
        "outliers": f"{_OUTLIER.name} ({len(shots.outliers)})",
        "outliers beyond": "outlier beyond the axis",
        "aside": f"{_ASIDE.name} ({len(shots.aside)})",
        "aside beyond": "set aside, beyond the axis",
        "curve": "the fit" if result.trusted else "the fit, not trusted",
        "band": "68 % band of the curve",
    }
    shown = {label: artist for label in names if (artist := drawn.get(label)) is not None and _any(artist)}
    page.figure.legend(
        list(shown.values()),
        [names[label] for label in shown],
        loc="upper left",
        bbox_to_anchor=((_COLUMN - 0.04) / WIDTH, 1 - top / page.height),
        borderpad=0.0,
        borderaxespad=0.0,
        handlelength=1.6,
        labelspacing=0.35,
    )


def _has_bars(shots: Shots) -> bool:
    return bool(np.isfinite(shots.means.bar).any())


def _any(artist: Any) -> bool:
    """Return whether a line of marks has any; other things always count."""
    return not hasattr(artist, "get_xdata") or len(artist.get_xdata()) > 0
