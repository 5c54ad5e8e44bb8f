"""Versions of derived quantities when machines are merged: both histories are kept, and fits name the right ones."""

from __future__ import annotations

import math
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

from nightfold.opening import open_store

START = datetime(2026, 10, 5, 19, tzinfo=UTC)
WRONG, RIGHT = "Heron", "heron"


def line(machine: str, first: int) -> list[dict[str, Any]]:
    """Return shots 15 s apart of a line at 80 MHz of the modulator."""
    return [
        {
            "machine": machine,
            "started": (START + timedelta(seconds=15 * (first + k))).isoformat(),
            "sequence": "image",
            "scan": f"line-{machine}",
            "swept": ["detuning"],
            "parameters": {"f": 79 + k / 8},
            "observables": {"n": 100 * math.exp(-((k / 8 - 1) ** 2) / 0.1) + 5},
        }
        for k in range(17)
    ]


def test_both_histories_are_kept_and_fits_name_the_right_version(anywhere: str, tmp_path: Path) -> None:
    path = tmp_path / "card.toml"
    with open_store(anywhere) as store:

        def use(machine: str, expression: str) -> None:
            path.write_text(
                f'machine = "{machine}"\n[parameters.f]\nunit = "MHz"\n'
                f'[derived.detuning]\nexpression = "{expression}"\n'
            )
            store.use_card(path)

        def named() -> dict[str, str]:
            """Return the expressions by which the axes of kept fits were made."""
            known = {
                (row["machine"], row["version"]): row["expression"]
                for row in store.derived(versions=True).to_dict("records")
            }
            machine_of = {scan.id: scan.machine for scan in store.scans()}
            return {
                fit.scan_key: known[machine_of[fit.scan_id], fit.settings["derived"]["detuning"]]
                for fit in store.fits()
            }

        for expression in ("f - 80 MHz", "2*f - 150 MHz"):
            use(WRONG, expression)
        use(RIGHT, "2*f - 160 MHz")
        use(RIGHT, "f - 80 MHz")
        store.take([*line(WRONG, 0), *line(RIGHT, 100)])
        for scan in store.scans():
            store.fit(scan.id, "gaussian", observable="n")
        before = named()
        assert before == {"line-Heron#1": "2*f - 150 MHz", "line-heron#1": "f - 80 MHz"}
        store.merge_machines(WRONG, RIGHT, reason="x")
        assert named() == before
        versions = store.derived(versions=True)
        assert set(versions["machine"]) == {RIGHT}
        assert dict(zip(versions["expression"], versions["version"], strict=True)) == {
            "2*f - 160 MHz": "1", "f - 80 MHz": "2", "2*f - 150 MHz": "3",
        }  # fmt: skip
        assert versions["expression"][versions["in_force"]].tolist() == ["f - 80 MHz"]
        assert [fit.stale for fit in store.fits()] == [True, False]
        store.refit()
        assert set(named().values()) == {"f - 80 MHz"}
