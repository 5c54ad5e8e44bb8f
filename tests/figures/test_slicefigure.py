"""What the figure of fits of slices shows."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import Any

import matplotlib as mpl
import numpy as np
import pytest
from matplotlib.figure import Figure

from nightfold import FitTable, fit_many
from nightfold.errors import FitError, NotFound
from nightfold.figures import slices_figure

Table = Callable[..., FitTable]
HOLDS, POWERS = (10.0, 20.0, 30.0, 40.0), (1.0, 2.0, 5.0)


def texts(figure: Figure) -> list[str]:
    return [item.get_text() for item in figure.findobj(mpl.text.Text)]


def test_one_axis_makes_points_with_intervals(slices: Table) -> None:
    table = slices({"hold": HOLDS}, bad=(1,))
    assert table.trusted.tolist() == [True, False, True, True]
    figure = slices_figure(table, title="map#1")
    good, bad = figure.axes[0].containers
    x, y = good.lines[0].get_data()  # type: ignore[attr-defined]
    assert x.tolist() == [10.0, 30.0, 40.0]
    assert y == pytest.approx(table.estimates["center"].value[[0, 2, 3]])
    (bars,) = good.lines[2]  # type: ignore[attr-defined]
    low, high = table.estimates["center"].interval(0.6827)
    assert bars.get_segments()[0][:, 1] == pytest.approx([low[0], high[0]])
    assert bad.lines[0].get_marker() == "x"  # type: ignore[attr-defined]
    said = texts(figure)
    assert "DO NOT TRUST 1 of 4 slices, crossed out" in said
    assert "hold (ms)" in said
    assert "center (A)" in said


def test_two_axes_make_a_map(slices: Table) -> None:
    table = slices({"power": POWERS, "hold": HOLDS}, bad=(5,))
    figure = slices_figure(table, estimate="fwhm")
    axes = figure.axes[0]
    shown, doubted = axes.collections
    values: Any = np.ma.filled(np.ma.asarray(shown.get_array()), np.nan)
    fitted = table.estimates["fwhm"].value.reshape(3, 4)
    fitted[1, 1] = np.nan
    assert values == pytest.approx(fitted, nan_ok=True)
    assert int((~np.ma.getmaskarray(np.ma.asarray(doubted.get_array()))).sum()) == 1
    assert len([item for item in axes.get_lines() if item.get_gid() == "crossed"]) == 2
    assert (axes.get_xlabel(), axes.get_ylabel()) == ("hold (ms)", "power (ms)")
    assert f"{fitted[0, 0]:.3f}" in texts(figure)
    trusted = fitted[np.isfinite(fitted)]
    assert shown.norm.vmin == trusted.min()
    assert shown.norm.vmax == trusted.max()


def test_three_axes_make_maps_side_by_side(slices: Table) -> None:
    figure = slices_figure(slices({"power": POWERS, "hold": HOLDS, "axis": ("x", "$y$")}))
    assert len(figure.axes) == 3
    assert {axes.get_title("left") for axes in figure.axes[:2]} == {"axis $y$", "axis x"}


def test_text_axes_are_named(slices: Table) -> None:
    figure = slices_figure(slices({"axis": ("x", "$y_1$")}))
    figure.draw_without_rendering()
    assert [label.get_text() for label in figure.axes[0].get_xticklabels()] == ["$y_1$", "x"]


def test_nothing_trusted_can_be_drawn(slices: Table) -> None:
    figure = slices_figure(slices({"hold": HOLDS}, bad=(0, 1, 2, 3)))
    assert any("DO NOT TRUST 4 of 4" in text for text in texts(figure))
    slices_figure(slices({"hold": HOLDS, "power": POWERS}, bad=tuple(range(12))))


def test_what_cannot_be_drawn_is_refused(slices: Table) -> None:
    table = slices({"hold": HOLDS})
    with pytest.raises(NotFound, match="did you mean center"):
        slices_figure(table, estimate="centre")
    with pytest.raises(FitError, match="no slices"):
        slices_figure(fit_many([0, 1, 2, 3], [[4, 3, 2, 1.5]], "exponential"))
    many = slices({"a": (1.0, 2.0), "b": (1.0, 2.0), "c": tuple(np.arange(13.0))})
    figure = slices_figure(many)
    assert len(figure.axes) == 3
    with pytest.raises(FitError, match="52 slices are scattered over 4 axes"):
        slices_figure(replace(many, slices=tuple({**w, "d": k} for k, w in enumerate(many.slices))))
    with pytest.raises(FitError, match="found 16 maps to draw, wanted 12 at most"):
        slices_figure(slices(dict.fromkeys("abcd", (1.0, 2.0, 3.0, 4.0))))
