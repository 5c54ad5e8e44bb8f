from __future__ import annotations

import io

import pytest
from hypothesis import given
from hypothesis import strategies as st

from nightfold_cli.layout import Cell, Column, Row, lay_out
from nightfold_cli.printable import cell_width, paragraph
from nightfold_cli.render import Screen

COLUMNS = (
    Column("scan"),
    Column("axes", wraps=True),
    Column("shots", right=True),
    Column("machine", spare=2),
    Column("atom_number (atoms)", right=True, spare=1),
)
ROWS: list[Row] = [
    ["loss-coarse#1", "coil_current 58.4…64.4 A", "61", "heron", "1.3428(62)e5"],
    ["7", "hold_time", "9", "heron", "-"],
]


def drawn(width: int) -> list[str]:
    laid = lay_out(COLUMNS, ROWS, width)
    return [
        *laid.head,
        *(line for row in laid.rows for line in row),
        *(f"hidden {name}" for name in laid.hidden),
    ]


def test_wide_enough_for_everything() -> None:
    assert drawn(80) == [
        "scan           axes                      shots  machine  atom_number (atoms)",
        "loss-coarse#1  coil_current 58.4…64.4 A     61  heron           1.3428(62)e5",
        "7              hold_time                     9  heron                      -",
    ]


def test_cells_wrap_before_a_column_goes() -> None:
    assert drawn(70) == [
        "scan           axes                shots  machine  atom_number (atoms)",
        "loss-coarse#1  coil_current           61  heron           1.3428(62)e5",
        "               58.4…64.4 A",
        "7              hold_time               9  heron                      -",
    ]


def test_heads_break_before_a_column_goes() -> None:
    assert drawn(60) == [
        "scan           axes             shots  machine   atom_number",
        "                                                     (atoms)",
        "loss-coarse#1  coil_current        61  heron    1.3428(62)e5",
        "               58.4…64.4 A",
        "7              hold_time            9  heron               -",
    ]


def test_the_most_spare_column_goes_first() -> None:
    assert drawn(50)[-1:] == ["hidden machine"]
    assert drawn(40)[-2:] == ["hidden machine", "hidden atom_number (atoms)"]


def test_a_word_that_is_too_long_is_cut_and_nothing_lost() -> None:
    laid = lay_out([Column("uid", wraps=True)], [["x" * 100]], 40)
    assert "".join(laid.rows[0]) == "x" * 100
    assert max(map(len, laid.rows[0])) <= 40


@pytest.mark.parametrize(("text", "width"), [("abc", 3), ("ä", 1), ("a\u0308", 1), ("冷原子", 6), ("🙂", 2)])
def test_width_in_cells(text: str, width: int) -> None:
    assert cell_width(text) == width


WORDS = st.text(st.characters(codec="utf-8", exclude_categories=["C", "Z"]), max_size=20)


@given(st.lists(st.tuples(WORDS, WORDS, WORDS), max_size=5), st.integers(40, 120))
def test_never_wider_than_the_screen_if_cells_may_wrap(rows: list[tuple[str, str, str]], width: int) -> None:
    columns = [
        Column("one", wraps=True),
        Column("two", wraps=True, spare=1),
        Column("three", wraps=True, spare=2),
    ]
    laid = lay_out(columns, rows, width)
    assert all(cell_width(line) <= width for row in laid.rows for line in row)
    assert len(laid.rows) == len(rows)


def screen(mode: str, width: int = 60) -> tuple[Screen, io.StringIO, io.StringIO]:
    out, err = io.StringIO(), io.StringIO()
    return Screen(out, err, mode, width), out, err  # type: ignore[arg-type]


def test_piped_tables_are_tab_separated() -> None:
    here, out, err = screen("piped")
    here.heading("a title")
    here.note("a note")
    here.table(
        [Column("a (A)", plain_name="a"), Column("b")], [[Cell("1\n2", "1; 2"), "x\ty"]], empty="nothing"
    )
    assert out.getvalue() == "a\tb\n1; 2\tx\\ty\n"
    assert err.getvalue() == ""


def test_an_empty_table_says_so() -> None:
    here, out, err = screen("piped")
    here.table([Column("a")], [], empty="nothing yet")
    assert (out.getvalue(), err.getvalue()) == ("a\n", "nightfold: nothing yet\n")


def test_hostile_text_cannot_reach_the_terminal(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("NO_COLOR", "1")
    here, out, _ = screen("terminal")
    here.table([Column("label")], [["\x1b[2Jgone [bold]red[/bold] :smile:"]], empty="")
    assert "\\x1b[2Jgone [bold]red[/bold] :smile:" in out.getvalue()


def test_no_colour_is_honoured(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("NO_COLOR", "1")
    monkeypatch.setenv("TERM", "xterm-256color")
    here, out, _ = screen("terminal")
    here.chart([[("⠉⠉", "curve"), ("●", "data")]])
    assert "36" not in out.getvalue()
    assert "⠉⠉" in out.getvalue()


def test_signs_that_the_terminal_cannot_show_are_replaced() -> None:
    latin = io.TextIOWrapper(io.BytesIO(), encoding="latin-1")
    assert not Screen(latin, latin, "terminal", 80).unicode
    assert Screen(io.StringIO(), io.StringIO(), "terminal", 80).unicode


def test_commands_to_copy_are_never_broken(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("NO_COLOR", "1")
    here, out, _ = screen("terminal", width=40)
    here.command("nightfold --store " + "very-long-folder/" * 9 + "heron.sqlite scans")
    assert out.getvalue().count("\n") == 1


@pytest.mark.parametrize("width", [20, 40, 80])
def test_a_table_of_columns_that_must_stay_is_never_wider_than_the_screen(width: int) -> None:
    columns = [Column("shot"), *(Column(f"reading_{n} (1e3 atoms)", right=True) for n in range(7))]
    rows: list[Row] = [["a" * 100, *(f"{n}.000(12)e5" for n in range(7))], ["漢字" * 30, *["-"] * 7]]
    laid = lay_out(columns, rows, width)
    assert laid.hidden == ()
    assert max(cell_width(line) for line in (*laid.head, *laid.rows[0], *laid.rows[1])) <= width
    assert all(f"{n}.000(12)e5" in "\n".join(laid.rows[0]) for n in range(7))


def test_a_paragraph_counts_cells() -> None:
    lines = paragraph("漢字 " * 20, 21, "- ", "  ")
    assert max(map(cell_width, lines)) <= 21
    assert lines[0].startswith("- 漢字")
    assert lines[1].startswith("  漢字")


def test_a_long_field_name_does_not_push_its_value_out(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("NO_COLOR", "1")
    here, out, _ = screen("terminal", width=40)
    here.fields([("frame " + "x" * 60, "words and more words " * 5)])
    assert max(map(len, out.getvalue().split("\n"))) <= 40
