"""Names at a glance are those of the store, on both engines, and never an error."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest

from nightfold import open_store
from nightfold.glimpse import KINDS, names_in_store


def records() -> list[dict[str, Any]]:
    plan = [
        ("hold", "loss", 0), ("hold", "loss", 2), ("kick", "slosh", 1), ("hold", "shared", 3), ("kick", "shared", 4)
    ]  # fmt: skip
    return [
        {
            "machine": "heron",
            "started": f"2026-10-{5 + day:02d}T20:{shot:02d}:00Z",
            "sequence": sequence,
            "scan": label,
            "swept": ["coil_current"],
            "parameters": {"coil_current": {"value": 60.0 + shot, "unit": "A"}, "trap": 1.0},
            "observables": {"atom_number": 1e5},
        }
        for sequence, label, day in plan
        for shot in range(5)
    ]


def test_names_are_those_of_the_store(anywhere: str) -> None:
    with open_store(anywhere) as store:
        store.take(records())
        scans = {scan.key: scan for scan in store.scans()}
    for kind, names in (
        ("machines", ["heron"]),
        ("sequences", ["hold", "kick"]),
        ("observables", ["atom_number"]),
        ("parameters", ["coil_current", "trap"]),
        ("axes", ["coil_current"]),
        ("sensors", []),
    ):
        assert names_in_store(anywhere, kind) == [(name, "") for name in names]
    keys = dict(names_in_store(anywhere, "scans"))
    assert keys["loss"] == "hold, 2 rounds"
    assert keys["slosh"] == "kick"
    assert {"loss#1", "loss#2", "slosh#1"} <= set(keys)
    assert "shared" not in keys
    assert "shared#1" not in keys
    assert {str(scan.id) for scan in scans.values()} <= set(keys)
    with open_store(anywhere) as store:
        for key in keys:
            assert store.scan(int(key) if key.isdigit() else key)


def test_scans_that_were_joined_into_others_are_left_out(store_path: Path) -> None:
    with open_store(store_path) as store:
        store.take(records())
        store.join_scans(["loss#1", "loss#2"])
    assert dict(names_in_store(str(store_path), "scans"))["loss"] == "hold"


@pytest.mark.parametrize("kind", [*KINDS, "nonsense"])
@pytest.mark.parametrize(
    "where", ["", "nothing.sqlite", "folder", "text", "postgresql://127.0.0.1:1/x", "mysql://x", "\0"]
)
def test_what_cannot_be_read_has_no_names(
    where: str, kind: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    Path("folder").mkdir()
    Path("text").write_text("no store", encoding="utf-8")
    assert names_in_store(where, kind) == []
    assert sorted(path.name for path in tmp_path.iterdir()) == ["folder", "text"]
