"""The figure of fits of slices: one estimate over the other axes, as points or as maps."""

from __future__ import annotations

from itertools import product
from typing import TYPE_CHECKING, Any

import matplotlib as mpl
import numpy as np
from numpy.typing import NDArray

from nightfold.concise import short
from nightfold.errors import FitError
from nightfold.figures.page import Page, make_page
from nightfold.figures.style import (
    INK,
    VERMILLION,
    label_axis,
    lines_of,
    plain_axes,
    safe,
    style,
    with_unit,
)
from nightfold.fits.principal import chosen_estimate

if TYPE_CHECKING:
    import xarray as xr
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from nightfold.fits.many import FitTable

MOST_PANELS = 12
_MAP = "cividis"
"""Its lightness rises evenly, so it is right in black and white too; made for the colour-blind (J. R. Nuñez et al.,
PLoS ONE 13, e0199239 (2018))."""
_DOUBTED = mpl.colors.ListedColormap(["#E4E4E4"])
_LEFT, _ROOM, _ACROSS = 0.72, 3.6, 5.1
_MOST_WRITTEN, _WRITTEN_IN = 120, 0.42
_CHARACTER = 0.07
"""Width of a character, in inches."""
_MANY = 14
"""Most names of settings along an axis."""


def slices_figure(
    fits: FitTable, *, estimate: str | None = None, title: str = "", detail: str = ""
) -> Figure:
    """Return a figure of one estimate of the fits of slices, over the axes not fitted along.

    Parameters
    ----------
    fits : FitTable
        Of a scan, fitted along one of its axes.
    estimate : str, optional
        Which one; by default the position, rate or time that the model is about.
    title, detail : str
        Above the figure.

    Returns
    -------
    matplotlib.figure.Figure
        One other axis: points with their 68 % intervals. Two: a map, three: maps side by side. What is not to be
        trusted is crossed out, and does not set the scale.

    Raises
    ------
    NotFound
        If the fits have no such estimate.
    FitError
        If there are no slices, or too many axes to be drawn.
    """
    name = chosen_estimate([*fits.estimates, *fits.derived], fits.outcome.request, estimate)
    if not fits.slices:
        raise FitError("figure: these fits are of no slices; wanted those of a scan along one of its axes")
    dataset = fits.to_dataset()
    dims = [str(dim) for dim in dataset[_variable(dataset, name)].dims]
    if dims == ["slice"]:
        raise FitError(
            f"figure: the {len(fits)} slices are scattered over {len(fits.slices[0])} axes, which makes no map; "
            "wanted a grid (to_dataset() has the numbers)"
        )
    data = dataset.transpose(*sorted(dims, key=lambda dim: -dataset.sizes[dim]))
    with style():
        page = _page(fits, title or f"{fits.model}: {name}", detail)
        if len(dims) == 1:
            _draw_points(page, data, name)
        else:
            _draw_maps(page, data, name)
    return page.figure


def _variable(dataset: xr.Dataset, name: str) -> str:
    """Return the variable of an estimate; an axis may have its name."""
    return name if name in dataset.data_vars else f"{name}_"


def _page(fits: FitTable, title: str, detail: str) -> Page:
    doubted = [found for found, good in zip(fits.warnings, fits.trusted, strict=True) if not good]
    messages: dict[str, list[str]] = {}
    for found in doubted:
        for warning in found:
            if not warning.advisory:
                messages.setdefault(warning.code, []).append(warning.message)
    grave = [
        f"{code} ({len(said)} {'slice' if len(said) == 1 else 'slices'}), as in: {said[0]}"
        for code, said in messages.items()
    ]
    return make_page(
        title,
        detail,
        f"DO NOT TRUST {len(doubted)} of {len(fits)} slices, crossed out",
        grave,
        [],
        _ROOM + 0.5,
    )


def _draw_points(page: Page, data: xr.Dataset, name: str) -> None:
    """Draw an estimate over one axis, with its intervals."""
    variable = _variable(data, name)
    (dim,) = data[variable].dims
    good = _trusted(data).astype(bool)
    key = 0.0 if good.all() else 0.2
    axes = page.axes(_LEFT, 0.05 + key, 6.1, _ROOM - 0.1 - key)
    at, names = _places(data[str(dim)].values)
    value, low, high = (
        data[variable + suffix].values.astype(np.float64) for suffix in ("", "_low68", "_high68")
    )
    bottom, top = _range(value, low, high, good)
    axes.set_ylim(bottom, top)
    trusted: dict[str, Any] = {"marker": "o", "color": INK, "ms": 4.5, "label": "value, 68 % interval"}
    doubted: dict[str, Any] = {
        "marker": "x",
        "color": VERMILLION,
        "ms": 6.5,
        "mew": 1.7,
        "label": "not to be trusted",
    }
    for chosen, looks in ((good, trusted), (~good, doubted)):
        shown = chosen & np.isfinite(value)
        if not shown.any():
            continue
        with np.errstate(invalid="ignore"):
            bars = np.clip(np.stack([value - low, high - value])[:, shown], 0, 10 * (top - bottom))
        inside = np.clip(value[shown], bottom, top)
        drawn = axes.errorbar(at[shown], inside, bars, linestyle="none", elinewidth=0.9, **looks)
        drawn.lines[0].set_clip_on(False)
    if names is None:
        label_axis(axes.xaxis, _long(data, str(dim)), _unit(data, str(dim)))
    else:
        axes.set_xticks(at, names)
        axes.set_xlabel(with_unit(_long(data, str(dim)), _unit(data, str(dim))))
    label_axis(axes.yaxis, name, _unit(data, variable))
    plain_axes(axes)
    if not good.all():
        axes.legend(loc="lower right", bbox_to_anchor=(1.0, 1.0), ncols=2, borderpad=0.0)


def _range(value: Any, low: Any, high: Any, good: Any) -> tuple[float, float]:
    """Return the ends of an axis: those of the trusted intervals, and of all values where none is trusted."""
    chosen = [part[good] for part in (value, low, high)] if good.any() else [value]
    known = np.concatenate(chosen)
    known = known[np.isfinite(known)]
    bottom, top = (float(known.min()), float(known.max())) if len(known) else (0.0, 1.0)
    margin = 0.08 * (top - bottom) or abs(top) * 0.05 or 1.0
    return bottom - margin, top + margin


def _trusted(data: xr.Dataset) -> NDArray[np.bool_]:
    return np.asarray(data["trusted" if "trusted" in data.data_vars else "trusted_"].values)


def _draw_maps(page: Page, data: xr.Dataset, name: str) -> None:
    """Draw an estimate over two axes, a map for each value of those beyond."""
    variable = _variable(data, name)
    across, up, *beyond = (str(dim) for dim in data[variable].dims)
    wheres = [
        dict(zip(beyond, place, strict=True))
        for place in product(*(range(data.sizes[dim]) for dim in beyond))
    ]
    if len(wheres) > MOST_PANELS:
        raise FitError(
            f"figure: found {len(wheres)} maps to draw, wanted {MOST_PANELS} at most (to_dataset() has the numbers)"
        )
    value, good = data[variable].values, _trusted(data)
    bottom, top = _colour_range(value, good)
    norm = mpl.colors.Normalize(bottom, top)
    columns = min(len(wheres), 1 if len(wheres) == 1 else 2 if len(wheres) <= 4 else 4)
    rows = -(-len(wheres) // columns)
    gap = 0.0 if len(wheres) == 1 else 0.25
    width, height = _ACROSS / columns, (_ROOM - 0.05) / rows
    for number, where in enumerate(wheres):
        row, column = divmod(number, columns)
        axes = page.axes(_LEFT + column * width, row * height + gap, width - gap, height - gap)
        part = data.isel(where)
        _draw_map(axes, part, variable, norm, (across, up), (width - gap) / data.sizes[across])
        outer = (column == 0, number + columns >= len(wheres))
        _name_map(axes, part, across, up, width - gap, *outer)
        if where:
            said = ", ".join(
                f"{_long(data, dim)} {_setting(data[dim].values[place])}" for dim, place in where.items()
            )
            axes.set_title(safe(said), fontsize=8.0, loc="left", pad=3.0)
    side = page.axes(_LEFT + _ACROSS + 0.12, gap, 0.16, _ROOM - 0.05 - gap)
    bar = page.figure.colorbar(mpl.cm.ScalarMappable(norm, _MAP), cax=side)
    bar.outline.set_linewidth(0.6)
    label_axis(side.yaxis, name, _unit(data, variable))


def _colour_range(value: Any, good: Any) -> tuple[float, float]:
    known = value[good & np.isfinite(value)] if good.any() else value[np.isfinite(value)]
    if not len(known):
        return 0.0, 1.0
    low, high = float(known.min()), float(known.max())
    return (low, high) if high > low else (low - (abs(low) * 0.05 or 1.0), high + (abs(high) * 0.05 or 1.0))


def _draw_map(
    axes: Axes,
    part: xr.Dataset,
    variable: str,
    norm: mpl.colors.Normalize,
    dims: tuple[str, str],
    cell: float,
) -> None:
    """Draw the cells of a map; untrusted ones are crossed, and a hole stays white."""
    value = part[variable].transpose(*dims).values.T
    good = part["trusted" if "trusted" in part.data_vars else "trusted_"].transpose(*dims).values.T
    colours = mpl.colormaps[_MAP].with_extremes(bad="white")
    cells: dict[str, Any] = {"edgecolors": "white", "linewidth": 0.4}
    axes.pcolormesh(np.ma.masked_invalid(np.where(good, value, np.nan)), cmap=colours, norm=norm, **cells)
    axes.pcolormesh(np.ma.masked_invalid(np.where(good, np.nan, value)), cmap=_DOUBTED, **cells)
    written = value.size <= _MOST_WRITTEN and cell >= _WRITTEN_IN
    digits = _digits(value[good & np.isfinite(value)])
    for row, column in np.argwhere(np.isfinite(value)):
        number = value[row, column]
        tone = "white" if norm(number) < 0.55 else INK
        if not good[row, column]:
            ends = np.array([0.12, 0.88])
            for rise in (ends, ends[::-1]):
                axes.plot(column + ends, row + rise, color=VERMILLION, linewidth=1.3, gid="crossed")
        elif written:
            text = digits(float(number))
            axes.text(column + 0.5, row + 0.5, text, ha="center", va="center", color=tone, fontsize=6.5)


def _digits(values: Any) -> Any:
    """Return how numbers are written in cells: so finely that they differ, without offset or power where possible."""
    if not len(values):
        return short
    span = float(np.ptp(values)) or abs(float(values[0])) or 1.0
    decimals = max(0, int(np.ceil(-np.log10(span))) + 2)
    largest = float(np.max(np.abs(values)))
    if decimals > 6 or largest >= 1e6:
        return short
    return lambda number: f"{number:.{decimals}f}"


def _name_map(
    axes: Axes, part: xr.Dataset, across: str, up: str, width: float, left: bool, below: bool
) -> None:
    """Name the axes of a map at its outer edges."""
    for dim, axis, shown, room in (
        (across, axes.xaxis, below, 44),
        (up, axes.yaxis, left, 30),
    ):
        settings = part[dim].values
        every = -(-len(settings) // _MANY)
        places = range(0, len(settings), every)
        axis.set_ticks([place + 0.5 for place in places])
        names = [safe(_setting(settings[place])) for place in places]
        axis.set_ticklabels(names if shown else [""] * len(names))
        if shown:
            axis.set_label_text("\n".join(lines_of(with_unit(_long(part, dim), _unit(part, dim)), room)))
    if below and sum(len(label.get_text()) + 2 for label in axes.get_xticklabels()) * _CHARACTER > width:
        axes.tick_params(axis="x", labelrotation=45)
    axes.tick_params(length=0.0, pad=2.5)
    for spine in axes.spines.values():
        spine.set_visible(False)


def _places(values: Any) -> tuple[NDArray[np.float64], list[str] | None]:
    """Return where settings stand on an axis, and their names where they are no numbers."""
    if values.dtype.kind == "f":
        return values, None
    return np.arange(len(values), dtype=np.float64), [safe(_setting(value)) for value in values]


def _setting(value: Any) -> str:
    plain = value.item() if isinstance(value, np.generic) else value
    if isinstance(plain, bool):
        return "true" if plain else "false"
    return short(plain) if isinstance(plain, float) else str(plain)


def _long(data: xr.Dataset, name: str) -> str:
    return str(data[name].attrs.get("long_name", name))


def _unit(data: xr.Dataset, name: str) -> str:
    return str(data[name].attrs.get("units", ""))
