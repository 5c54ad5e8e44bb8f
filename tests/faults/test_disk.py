"""A full disk: nothing half-written, a clear error, and the store goes on when there is room again."""

from __future__ import annotations

import resource
import signal
import subprocess
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import pytest

from nightfold.errors import StoreError
from nightfold.opening import create_store, open_store


def shot(number: int) -> dict[str, Any]:
    return {
        "machine": "heron", "sequence": "s", "uid": f"shot {number}", "parameters": {"a": number, "text": "x" * 200},
        "started": f"2026-10-05T{number // 3600:02d}:{number // 60 % 60:02d}:{number % 60:02d}Z",
        "observables": {f"n{name}": float(number) for name in range(8)},
    }  # fmt: skip


@contextmanager
def files_no_larger_than(size: int) -> Iterator[None]:
    soft, hard = resource.getrlimit(resource.RLIMIT_FSIZE)
    before = signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
    resource.setrlimit(resource.RLIMIT_FSIZE, (size, hard))
    try:
        yield
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, (soft, hard))
        signal.signal(signal.SIGXFSZ, before)


def test_no_room_for_the_shots(store_path: Path) -> None:
    with open_store(store_path) as store:
        assert store.take([shot(n) for n in range(20)]).new == 20
        with (
            files_no_larger_than(600_000),
            pytest.raises(StoreError, match=r"store\.sqlite: .*(full|I/O error)"),
        ):
            store.take([shot(n) for n in range(6000)])
        kept = len(store.shots())
        assert 20 <= kept < 6000
        for uid in store.shots().uid.iloc[-3:]:
            assert len(store.shot(uid).observables) == 8
        outcome = store.take([shot(n) for n in range(3000)])
        assert (outcome.known + outcome.new, outcome.refused) == (3000, [])
    with open_store(store_path) as store, store._session.reading() as connection:
        assert connection.exec_driver_sql("PRAGMA integrity_check").scalar() == "ok"
        assert connection.exec_driver_sql("PRAGMA foreign_key_check").all() == []


def test_no_room_for_a_new_store(tmp_path: Path) -> None:
    path = tmp_path / "a.sqlite"
    with files_no_larger_than(20_000), pytest.raises(StoreError, match=r"a\.sqlite: "):
        create_store(path)
    open_store(path, create=True).close()
    open_store(path).close()


def test_a_full_file_system(tmp_path: Path) -> None:
    folder = tmp_path / "small"
    folder.mkdir()
    mounted = subprocess.run(
        ["mount", "-t", "tmpfs", "-o", "size=1m", "tmpfs", str(folder)], capture_output=True, check=False
    )
    if mounted.returncode:
        pytest.skip("this user may not mount a small file system")
    try:
        with open_store(folder / "a.sqlite", create=True) as store:
            with pytest.raises(
                StoreError, match=r"the disk is full; nothing of this batch was stored|I/O error"
            ):
                store.take([shot(n) for n in range(6000)])
            kept = len(store.shots())
            assert kept < 6000
            subprocess.run(["mount", "-o", "remount,size=50m", str(folder)], check=True)
            outcome = store.take([shot(n) for n in range(1000)])
            assert (outcome.known + outcome.new, outcome.refused) == (1000, [])
    finally:
        subprocess.run(["umount", str(folder)], check=True)
