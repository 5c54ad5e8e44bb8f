from __future__ import annotations

import pytest

from nightfold_cli.spelling import spelled


@pytest.mark.parametrize(
    ("text", "encoding", "shown"),
    [
        ("60.5…62.5 A", "ascii", "60.5...62.5 A"),
        ("± 3 µm", "ascii", "+- 3 um"),
        ("± 3 µm…", "latin-1", "± 3 µm..."),
        ("Gröbner", "ascii", "Grobner"),
        ("漢", "ascii", "?"),
        ("… ±", "utf-8", "… ±"),
        ("… ±", None, "… ±"),
    ],
)
def test_spelled(text: str, encoding: str | None, shown: str) -> None:
    assert spelled(text, encoding) == shown
