"""kill -9 at any moment: nothing lost that was acknowledged, nothing doubled when all is handed over again."""

from __future__ import annotations

import json
import os
import random
import shutil
import signal
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

import pytest
from sqlalchemy import text

from nightfold.opening import create_store, open_store
from nightfold.store import Store

PROGRAM = Path(__file__).parent / "growing.py"
KILLS = int(os.environ.get("NIGHTFOLD_KILLS", "3"))
SHOTS = 40


def shot(number: int) -> dict[str, Any]:
    return {
        "uid": f"shot {number}", "machine": "heron", "sequence": "hold",
        "started": f"2026-10-05T20:{number // 60:02d}:{number % 60:02d}Z",
        "parameters": {**{f"constant {n}": n for n in range(20)}, "hold": number % 7, "coil": number // 20},
        "observables": {"atoms": {"value": 1e5 + number, "stderr": 10.0}, "width": None if number % 9 == 0 else 2.0},
        "note": "odd" if number % 10 == 0 else "", "failed": "no atoms" if number % 13 == 0 else None,
    }  # fmt: skip


def kill_while_taking(where: str, stream: Path, mode: str, after_s: float) -> tuple[list[str], bool]:
    """Start the process, kill it after a time, and return what it acknowledged and whether it was still at it."""
    taker = subprocess.Popen(
        [sys.executable, str(PROGRAM), where, str(stream), mode],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
    )
    assert taker.stdout is not None
    assert taker.stderr is not None
    first = taker.stdout.readline()
    time.sleep(after_s)
    taker.send_signal(signal.SIGKILL)
    rest = taker.stdout.read()
    problem = taker.stderr.read()
    code = taker.wait()
    taker.stdout.close()
    taker.stderr.close()
    assert problem == b""
    told = (first + rest).decode().splitlines(keepends=True)
    return [line.strip() for line in told if line.endswith("\n")], code == -signal.SIGKILL


def whole(store: Store) -> dict[str, Any]:
    """Return everything a store says of its shots, and how they are folded; the ids of scans found may differ."""
    table = store.shots(set_aside=True)
    folded = {str(key): tuple(own.uid) for key, own in table.groupby("scan")}
    return {
        uid: (without(store.shot(uid), "scan"), folded.get(str(key)))
        for uid, key in zip(table.uid, table.scan, strict=True)
    }


def without(view: Any, *names: str) -> str:
    return repr(
        {name: getattr(view, name) for name in view.__slots__ if name not in ("source", "line", *names)}
    )


def counted(store: Store) -> list[int]:
    with store._session.reading() as connection:
        return [
            int(connection.execute(text(f"SELECT count(*) FROM {name}")).scalar_one())
            for name in ("shot", "reading", "note", "set_aside", "past_reading", "machine", "parameter")
        ]


@pytest.mark.parametrize("engine", ["sqlite", "postgresql"])
def test_a_stream_taken_shot_by_shot(
    engine: str, tmp_path: Path, request: pytest.FixtureRequest, empty_store: Path
) -> None:
    chance = random.Random(7)
    stream = tmp_path / "night.jsonl"
    stream.write_text("".join(json.dumps(shot(number)) + "\n" for number in range(SHOTS)) + "{}\n")
    shutil.copy(empty_store, tmp_path / "plain.sqlite")
    with open_store(tmp_path / "plain.sqlite") as plain:
        for number in range(SHOTS):
            plain.take([shot(number)])
        wanted, rows = whole(plain), counted(plain)
        pieces = {uid: without(plain.shot(uid), "scan") for uid in wanted}
    between = 0
    for kill in range(KILLS if engine == "sqlite" else 1):
        where = str(tmp_path / f"{kill}.sqlite")
        if engine == "sqlite":
            shutil.copy(empty_store, where)
        else:
            where = str(request.getfixturevalue("new_schema")())
            create_store(where).close()
        told, killed = kill_while_taking(where, stream, "each", chance.uniform(0, 0.15))
        with open_store(where) as store:
            kept = set(store.shots(set_aside=True).uid)
            between += killed and 0 < len(kept) < SHOTS
            assert set(told) <= kept, "acknowledged, and lost"
            assert kept - set(told) <= {f"shot {len(told)}"}, "more than the one in flight"
            for uid in kept:
                assert without(store.shot(uid), "scan") == pieces[uid], "half a shot"
            outcome = store.take(shot(number) for number in range(SHOTS))
            assert (outcome.known, outcome.new, outcome.refused) == (len(kept), SHOTS - len(kept), [])
            assert whole(store) == wanted
            assert counted(store) == rows
    print(
        f"{engine}: {between} of {KILLS if engine == 'sqlite' else 1} kills fell between the first and the last commit"
    )
    assert between >= (KILLS + 1) // 2 or engine != "sqlite"


def test_a_whole_file(tmp_path: Path, store_path: Path) -> None:
    stream = tmp_path / "night.jsonl"
    lines = [
        json.dumps({**shot(n), "started": f"2026-10-05T{n // 3600:02d}:{n // 60 % 60:02d}:{n % 60:02d}Z"})
        for n in range(4000)
    ]
    stream.write_text("\n".join(lines) + "\n")
    _, killed = kill_while_taking(str(store_path), stream, "whole", 0.15)
    with open_store(store_path) as store:
        kept = len(store.shots(set_aside=True))
        outcome = store.take_file(stream)
        assert (outcome.known, outcome.new) == (kept, 4000 - kept)
        assert len(store.shots(set_aside=True)) == 4000
    assert killed
    assert kept > 0
