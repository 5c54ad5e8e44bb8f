from __future__ import annotations

import math

import pytest

from nightfold_cli.canvas import Canvas, Line
from nightfold_cli.plots import Chart, Label, Points, shading
from nightfold_cli.ticks import ticks_between

X = [31 + 0.25 * index for index in range(21)]


def dip(x: float) -> float:
    return 120000 * (1 - 0.6 / (1 + ((x - 33.6) / 0.3) ** 2))


def text(lines: list[Line]) -> list[str]:
    return ["".join(part for part, _ in line).rstrip() for line in lines]


def chart(unicode: bool = True, width: int = 60) -> Chart:
    dense = [31 + 5 * index / 300 for index in range(301)]
    return Chart(
        Points(X, [dip(x) for x in X], [3000.0] * 21, [index == 2 for index in range(21)]),
        Label("field", "G"),
        Label("atom_number", "atoms"),
        width=width,
        height=13,
        curve=(dense, [dip(x) for x in dense]),
        unicode=unicode,
    )


GOLDEN = """
atom_number (1e3 atoms)
         |  | | |  |                              |  | | |
     120 +  o.o.x..o.o.o.o..o              .o.o.o.o..o.o.o
         |                  |.o.        .o..|
     100 +                    |..      o.
         |                      o.    .|
      80 +                       .    .
         |                       ..  ..
      60 +                        .  o
         |                        o...
         |                         ..
         +-----------+-----------------+-----------------+--
                    32                34                36
          field (G)
"""


def test_golden_chart() -> None:
    assert text(chart(unicode=False).lines()) == GOLDEN.strip("\n").split("\n")


@pytest.mark.parametrize("width", [50, 79, 120])
def test_chart_keeps_to_its_width(width: int) -> None:
    lines = text(chart(width=width).lines())
    assert max(map(len, lines)) <= width
    assert len(lines) == 13 + 1


def test_data_and_curve_differ_by_shape() -> None:
    unicode, plain = "\n".join(text(chart().lines())), "\n".join(text(chart(unicode=False).lines()))
    assert "●" in unicode
    assert "×" in unicode
    assert any(0x2800 < ord(sign) < 0x2900 for sign in unicode)
    assert "o" in plain
    assert plain.isascii()


def test_axis_titles_name_unit_and_power_of_ten() -> None:
    lines = text(chart().lines())
    assert lines[0] == "atom_number (1e3 atoms)"
    assert lines[-1].strip() == "field (G)"
    assert lines[-2].split() == ["32", "34", "36"]


def test_residuals_stand_below_their_points() -> None:
    drawn = chart(unicode=False)
    residuals = [0.0] * 21
    residuals[5] = 100.0
    rows = text(drawn.residuals(residuals, "residuals"))
    assert rows[0] == "residuals"
    assert rows[3].startswith("       0 +")
    column = rows[1].index("o")
    assert any(row[column] == "o" for row in text(drawn.lines())[1:-3])


def test_points_that_are_not_finite_are_left_out() -> None:
    points = Points([1.0, 2.0, math.nan, 4.0], [1.0, math.nan, 3.0, 2.0])
    lines = text(Chart(points, Label("x"), Label("y"), unicode=False).lines())
    assert sum(line.count("o") for line in lines) == 2


def test_nothing_to_draw_says_so() -> None:
    nothing = Chart(Points([1.0], [math.nan]), Label("x"), Label("y"))
    assert text(nothing.lines()) == ["(nothing finite to draw)"]
    assert nothing.residuals([math.nan], "residuals") == []


def test_one_point_is_drawn() -> None:
    lines = text(Chart(Points([1.0], [5.0]), Label("x"), Label("y"), unicode=False).lines())
    assert sum(line.count("o") for line in lines) == 1


def test_map_has_two_signs_a_point() -> None:
    assert shading([[0.0, 1.0], [math.nan, 0.5]], unicode=False) == ["  ##", "??::"]
    assert shading([[math.nan]]) == []


def test_dots_outside_are_ignored() -> None:
    canvas = Canvas(2, 1, fine=True)
    canvas.dot(-1, 0)
    canvas.dot(0, 99)
    canvas.put(5, 5, "o", "data")
    assert canvas.line(0) == [("  ", "plain")]


@pytest.mark.parametrize(
    ("low", "high", "labels", "offset", "exponent"),
    [
        (30.9, 36.1, ("31", "32", "33", "34", "35", "36"), "", 0),
        (46e3, 131e3, ("60", "80", "100", "120"), "", 3),
        (2.1e-9, 4.1e-9, ("2.5", "3.0", "3.5", "4.0"), "", -9),
        (384228115.1, 384228125.2, ("0", "2", "4", "6", "8"), "384228116", 0),
        (-1.1, 1.1, ("-1.0", "-0.5", "0.0", "0.5", "1.0"), "", 0),
    ],
)
def test_ticks(low: float, high: float, labels: tuple[str, ...], offset: str, exponent: int) -> None:
    ticks = ticks_between(low, high, 6)
    assert (ticks.labels, ticks.offset, ticks.exponent) == (labels, offset, exponent)
    assert all(low <= position <= high for position in ticks.positions)


def test_offset_is_named_in_the_title() -> None:
    ticks = ticks_between(384228115.1, 384228125.2, 6)
    assert ticks.title("laser", "MHz") == "laser (MHz), counted from 384228116 MHz"
