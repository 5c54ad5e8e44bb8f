"""What the figure of a fit shows, told by its artists and its text."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import matplotlib as mpl
import numpy as np
import pytest
from matplotlib.figure import Figure
from matplotlib.lines import Line2D

from nightfold import FitResult, FitWarning, fit_curve
from nightfold.errors import FitError
from nightfold.figures import fit_figure


def texts(figure: Figure) -> str:
    return "\n".join(item.get_text() for item in figure.findobj(mpl.text.Text))


def line(figure: Figure, label: str, panel: int = 0) -> Line2D:
    (found,) = [item for item in figure.axes[panel].get_lines() if item.get_label() == label]
    return found


def points(item: Line2D) -> list[tuple[float, float]]:
    return list(
        zip(np.asarray(item.get_xdata()).tolist(), np.asarray(item.get_ydata()).tolist(), strict=True)
    )


def test_shots_means_curve_and_band(resonance: FitResult) -> None:
    figure = fit_figure(resonance)
    single = line(figure, "single")
    assert len(points(single)) == 63
    (means,) = figure.axes[0].containers
    x, y = means.lines[0].get_data()  # type: ignore[attr-defined]
    assert len(x) == 21
    assert y[0] == pytest.approx(resonance.y[:3].mean())
    (bar,) = means.lines[2]  # type: ignore[attr-defined]
    (_, low), (_, high) = bar.get_segments()[0]
    scatter = np.sqrt(resonance.y.reshape(21, 3).var(axis=1, ddof=1).mean())
    assert (high - low) / 2 == pytest.approx(scatter / np.sqrt(3))
    curve = line(figure, "curve")
    at, value = np.asarray(curve.get_xdata()), np.asarray(curve.get_ydata())
    assert value == pytest.approx(resonance.predict(at))
    assert curve.get_linestyle() == "-"
    assert [item.get_label() for item in figure.axes[0].collections if item.get_label() == "band"] == ["band"]


def test_residuals_are_shots_less_curve(resonance: FitResult) -> None:
    figure = fit_figure(resonance)
    assert len(figure.axes) == 2
    assert [y for _, y in points(line(figure, "single", 1))] == pytest.approx(resonance.residuals.tolist())
    assert figure.axes[1].get_xlim() == figure.axes[0].get_xlim()


def test_numbers_stand_in_the_figure(resonance: FitResult) -> None:
    said = texts(
        fit_figure(resonance, title="loss#1", detail="heron", x_name="coil_current", y_name="atoms_left")
    )
    center = resonance.estimates["center"]
    assert f"{center.value:.4f}({center.stderr * 1e4:.0f}) A" in said
    assert f"95 %: {center.interval(0.95)[0]:.4f}" in said
    for word in ("loss#1", "heron", "coil_current (A)", "atoms_left (1e5 atoms)", "fwhm", "63 shots"):
        assert word in said
    assert "TRUST" not in said


def test_outliers_have_a_shape_of_their_own(resonance: FitResult) -> None:
    x, y = resonance.x.copy(), resonance.y.copy()
    y[10], y[40] = 1.6e5, 9e9
    outliers = (10, 40)
    used = np.delete(np.arange(len(x)), outliers)
    rows = list(outliers)
    fit = replace(
        resonance, x=x[used], y=y[used], used=used, outliers=outliers, outlier_x=x[rows], outlier_y=y[rows]
    )
    figure = fit_figure(fit, aside=([60.5], [1.1e5]))
    crosses = line(figure, "outliers")
    assert points(crosses) == [(x[10], 1.6e5)]
    assert crosses.get_marker() == "x"
    assert crosses.get_marker() != line(figure, "single").get_marker()
    beyond = line(figure, "outliers beyond")
    assert points(beyond) == [(x[40], figure.axes[0].get_ylim()[1])]
    assert beyond.get_marker() == "^"
    assert len(points(line(figure, "single"))) == 61
    assert points(line(figure, "aside")) == [(60.5, 1.1e5)]
    said = texts(figure)
    assert "outlier, not used (2)" in said
    assert "outlier beyond the axis" in said
    assert "set aside (1)" in said
    assert figure.axes[0].get_ylim()[1] < 2e5, "one wild shot must not flatten the others"


def test_what_is_not_to_be_trusted_says_so(nothing: FitResult) -> None:
    assert not nothing.trusted
    figure = fit_figure(nothing)
    said = texts(figure)
    assert "DO NOT TRUST THIS FIT" in said
    assert "no-feature: " in said
    assert "estimates, not trusted" in said
    assert line(figure, "curve").get_linestyle() == "--"
    assert figure.findobj(lambda item: item.get_gid() == "doubt")


def test_an_advisory_warning_is_told_without_a_frame(resonance: FitResult) -> None:
    fit = replace(resonance, warnings=(FitWarning("poor-fit", "residuals follow a pattern", True),))
    figure = fit_figure(fit)
    assert "to know: poor-fit: residuals follow a pattern" in texts(figure)
    assert not figure.findobj(lambda item: item.get_gid() == "doubt")


def test_names_from_outside_are_text_and_nothing_else(resonance: FitResult, tmp_path: Any) -> None:
    from nightfold.figures import save_figure

    hostile = "$\\frac{1}{$ <b>&_x_^{\x1b[2J\n"
    figure = fit_figure(resonance, title=hostile, detail=hostile, x_name=hostile, y_name=hostile)
    for kind in ("svg", "png", "pdf"):
        save_figure(figure, tmp_path / f"a.{kind}")
    text = (tmp_path / "a.svg").read_text("utf-8")
    assert "$\\frac{1}{$ &lt;b&gt;&amp;_x_^{\\x1b[2J\\n" in text
    figure.savefig(tmp_path / "b.png")  # with the settings of the user


def test_a_huge_offset_is_in_the_name_of_the_axis() -> None:
    x = 384.2281e12 + np.linspace(0, 1e8, 31)
    y = 1e4 - 4e3 / (1 + (2 * (x - 384.22815e12) / 2e7) ** 2) + 50 * np.cos(np.arange(31.0) ** 2)
    figure = fit_figure(fit_curve(x, y, "lorentzian", unit_x="Hz"), x_name="probe")
    assert figure.axes[1].get_xlabel() == "probe - 3.84228e14 (1e8 Hz)"
    labels = [label.get_text() for label in figure.axes[1].get_xticklabels()]
    assert labels == ["1.0", "1.2", "1.4", "1.6", "1.8", "2.0"]


def test_single_shots_have_the_bars_given() -> None:
    x = np.linspace(0, 3, 12)
    y = np.exp(-x) + 0.01 * np.cos(9 * x)
    fit = fit_curve(x, y, "exponential", weights="equal", robust=False)
    figure = fit_figure(fit, stderr=np.full(12, 0.02))
    (bar,) = figure.axes[0].containers[0].lines[2]  # type: ignore[attr-defined]
    (_, low), (_, high) = bar.get_segments()[3]
    assert high - low == pytest.approx(0.04)
    said = texts(figure)
    assert "one shot, ± 1 stderr" in said
    assert "mean" not in said


def test_bars_are_of_the_scatter_that_the_fit_learnt(resonance: FitResult) -> None:
    fit = replace(resonance, deviation=0.02 * resonance.y)
    figure = fit_figure(fit, stderr=np.full(63, 1.0))
    (bar,) = figure.axes[0].containers[0].lines[2]  # type: ignore[attr-defined]
    (_, low), (_, high) = bar.get_segments()[20]
    assert (high - low) / 2 == pytest.approx(np.sqrt(np.mean((0.02 * resonance.y[60:]) ** 2) / 3))


def test_stderr_of_other_data_are_refused(resonance: FitResult) -> None:
    with pytest.raises(FitError, match="2 stderr"):
        fit_figure(resonance, stderr=[1.0, 2.0])


def test_settings_of_the_user_are_left_alone(resonance: FitResult) -> None:
    before = dict(mpl.rcParams)
    fit_figure(resonance)
    assert dict(mpl.rcParams) == before


@pytest.mark.parametrize("count", [5, 6])
def test_few_points_and_constant_ones_can_be_drawn(count: int) -> None:
    x = np.arange(float(count))
    fit_figure(fit_curve(x, np.ones(count), "gaussian"))
    fit_figure(fit_curve(x, x, "exponential", fixed={"lifetime": 3.0}))
