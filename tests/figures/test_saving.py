"""Figures as files: every format, the same bytes each time, never half a file."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import pytest

from nightfold import FitResult
from nightfold.errors import RequestError
from nightfold.figures import fit_figure, save_figure

HEADS = {"png": b"\x89PNG", "svg": b"<?xml", "pdf": b"%PDF"}


@pytest.mark.parametrize("kind", HEADS)
def test_the_same_figure_gives_the_same_bytes(kind: str, resonance: FitResult, tmp_path: Path) -> None:
    for name in ("a", "b"):
        save_figure(fit_figure(resonance, title="loss#1"), tmp_path / f"{name}.{kind}")
    written = (tmp_path / f"a.{kind}").read_bytes()
    assert written.startswith(HEADS[kind])
    assert written == (tmp_path / f"b.{kind}").read_bytes()
    assert sorted(path.name for path in tmp_path.iterdir()) == [f"a.{kind}", f"b.{kind}"]


def test_no_time_is_written_and_text_stays_text(resonance: FitResult, tmp_path: Path) -> None:
    figure = fit_figure(resonance, title="loss#1")
    save_figure(figure, tmp_path / "a.svg")
    text = (tmp_path / "a.svg").read_text("utf-8")
    assert "<dc:date>" not in text
    assert ">loss#1</text>" in text
    save_figure(figure, tmp_path / "a.pdf")
    assert b"CreationDate" not in (tmp_path / "a.pdf").read_bytes()
    assert b"/Type3" not in (tmp_path / "a.pdf").read_bytes()


def test_another_suffix_is_refused(resonance: FitResult, tmp_path: Path) -> None:
    with pytest.raises(RequestError, match=r"found the suffix '.jpg', wanted .png, .svg or .pdf"):
        save_figure(fit_figure(resonance), tmp_path / "a.jpg")
    assert not list(tmp_path.iterdir())


def test_what_fails_leaves_what_was_there(resonance: FitResult, tmp_path: Path) -> None:
    (tmp_path / "a.png").mkdir()
    with pytest.raises(OSError, match=r"a\.png"):
        save_figure(fit_figure(resonance), tmp_path / "a.png")
    assert [path.name for path in tmp_path.iterdir()] == ["a.png"]


def test_only_a_figure_loads_matplotlib() -> None:
    code = """
import sys, nightfold.figures, nightfold.fits.result, nightfold_cli.commands.fit
assert "matplotlib" not in sys.modules
nightfold.figures.fit_figure
assert "matplotlib" in sys.modules and "matplotlib.pyplot" not in sys.modules
"""
    subprocess.run([sys.executable, "-c", code], check=True)
