"""Choosing shots and the columns asked for."""

from __future__ import annotations

import math
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import pandas as pd
import pytest

from nightfold.errors import ChoiceNeeded, NotFound
from nightfold.ledger import selecting
from nightfold.ledger.columns import setting_columns
from nightfold.opening import open_store
from nightfold.store import Store


def shot(number: int, **changes: Any) -> dict[str, Any]:
    return {
        "machine": "heron", "sequence": "s", "started": f"2026-10-05T20:{number:02d}:00Z", "uid": f"shot{number:02d}",
        "parameters": {"a": number, "mode": "x"}, "observables": {"n": {"value": 10 * number, "stderr": 1}}, **changes,
    }  # fmt: skip


def test_the_columns_of_the_contract(anywhere: str) -> None:
    with open_store(anywhere) as store:
        empty = store.shots()
        assert list(empty.columns) == ["uid", "started", "sequence", "scan"]
        store.take([shot(1), shot(0), shot(2, scan="x", swept=["a"])])
        frame = store.shots(["a", "mode"], ["n", "n_stderr"])
        assert list(frame.columns) == ["uid", "started", "sequence", "scan", "a", "mode", "n", "n_stderr"]
        assert str(frame.started.dtype) == "datetime64[us, UTC]" == str(empty.started.dtype)
        assert list(frame.uid) == ["shot00", "shot01", "shot02"]
        assert list(frame.a) == [0, 1, 2]
        assert list(frame.n) == [0, 10, 20]
        assert list(frame.n_stderr) == [1, 1, 1]
        assert frame.scan.isna().tolist() == [True, True, False]
        assert frame.scan[2] == "x#1"
        assert list(store.shots("a").columns[4:]) == ["a"]
        assert list(store.shots(observables=["n_stderr"]).n_stderr) == [1, 1, 1]


def test_filters(store: Store) -> None:
    store.take([shot(n, sequence=("s", "t")[n % 2], scan=f"x{n % 2}" if n > 6 else None) for n in range(10)])
    store.take([shot(20, machine="egret", uid="other")])

    def numbers(**narrow: Any) -> list[int]:
        return [int(value) for value in store.shots(["a"], **narrow).a]

    assert numbers() == [*range(10), 20]
    assert numbers(machine="heron", sequence="t") == [1, 3, 5, 7, 9]
    assert numbers(since="2026-10-05T20:03:00Z", until="2026-10-05T20:05:00Z") == [3, 4]
    assert numbers(since=datetime(2026, 10, 5, 20, 8, tzinfo=UTC), machine="heron") == [8, 9]
    assert numbers(limit=3) == [8, 9, 20]
    assert numbers(limit=0) == []
    assert numbers(scan="x1#1") == [7, 9]
    assert numbers(scan="x1", sequence="s") == []
    assert numbers(since="2026-10-06") == []
    for narrow, message in (
        ({"machine": "hero"}, "machine 'hero': not in this store; it has heron"),
        ({"sequence": "u"}, "sequence 'u': not in this store"),
        ({"scan": "none"}, "none"),
        ({"since": "soon"}, "time 'soon': wanted an ISO 8601 time"),
    ):
        with pytest.raises(NotFound, match=message):
            store.shots(**narrow)  # type: ignore[arg-type]
    with pytest.raises(NotFound, match="parameter 'aa': not in this store; it has"):
        store.shots(["aa"])
    with pytest.raises(NotFound, match="observable 'm': not in this store; it has"):
        store.shots([], ["m"])


def test_local_times_are_those_of_the_machine(store: Store, tmp_path: Path) -> None:
    path = tmp_path / "heron.toml"
    path.write_text('machine = "heron"\nzone = "Asia/Kolkata"\n')
    store.use_card(path)
    store.take([shot(0, started="2026-10-05T18:29:59Z"), shot(1, started="2026-10-05T18:30:00Z")])
    assert list(store.shots(since="2026-10-06").uid) == ["shot01"]
    assert list(store.shots(until="2026-10-06").uid) == ["shot00"]
    assert list(store.shots(since="2026-10-06T00:00").uid) == ["shot01"]
    assert list(store.shots(since=datetime(2026, 10, 6), machine="heron").uid) == ["shot01"]


def test_what_is_missing_is_missing(store: Store) -> None:
    store.take(
        [
            shot(0, parameters={"a": 1, "on": True, "ramp": [1, 2]}),
            shot(1, parameters={}, observables={"n": math.inf}),
            shot(2, parameters={"a": 2**60 + 1, "mode": "x"}, observables={"n": None}),
        ]
    )
    frame = store.shots(["a", "on", "mode", "ramp"], ["n", "n_stderr"])
    assert frame.a.tolist() == [1, None, 2**60 + 1]
    assert frame.on.tolist() == [True, None, None]
    assert frame["mode"].isna().tolist() == [True, True, False]
    assert frame.ramp[0] == "[1,2]"
    assert frame.n.tolist()[:2] == [0, math.inf]
    assert math.isnan(frame.n[2])
    assert str(store.shots([], ["n"]).n.dtype) == "float64"


def test_units_that_differ_between_machines(store: Store) -> None:
    store.take([shot(0, parameters={"a": {"value": 1, "unit": "ms"}})])
    store.take([shot(1, machine="egret", parameters={"a": {"value": 1, "unit": "A"}})])
    with pytest.raises(
        ChoiceNeeded, match="parameter 'a': differs in kind or unit between egret, heron; name the machine"
    ):
        store.shots(["a"])
    frame = store.shots(["a"], machine="egret")
    assert frame.attrs["units"] == {"a": "A"}


def test_very_many_shots(store: Store) -> None:
    """By their condition and, with a limit, by their ids."""
    store.take(
        shot(n % 60, uid=f"s{n}", started=f"2026-10-05T00:{n // 60:02d}:{n % 60:02d}Z") for n in range(700)
    )
    plain = store.shots(["a", "mode"], ["n"])
    pd.testing.assert_frame_equal(store.shots(["a", "mode"], ["n"], limit=700), plain)
    assert len(plain) == 700


def test_many_shots_while_another_writes(postgresql_url: str, monkeypatch: pytest.MonkeyPatch) -> None:
    with open_store(postgresql_url, create=True) as store, open_store(postgresql_url) as other:
        store.take([shot(n) for n in range(5)])
        columns = setting_columns

        def and_write(*arguments: Any) -> Any:
            other.take([shot(30)])
            return columns(*arguments)

        monkeypatch.setattr(selecting, "setting_columns", and_write)
        assert len(store.shots(["a"], ["n"])) == 5


def test_names_of_the_table_itself_are_not_lost(store: Store) -> None:
    store.take([shot(0, parameters={"uid": 1, "started": 2, "a": 3})])
    with pytest.raises(ChoiceNeeded, match="'started'"):
        store.shots(["started"])
    assert store.shot("shot00").parameters["started"].value == 2


def test_machines_and_names(store: Store) -> None:
    store.take([shot(0), shot(1, machine="egret", parameters={"b": True}, observables={})])
    assert store.machines() == ["egret", "heron"]
    assert store.parameters()[["machine", "name", "kind"]].to_numpy().tolist() == [
        ["egret", "b", "truth"], ["heron", "a", "number"], ["heron", "mode", "text"],
    ]  # fmt: skip
    assert list(store.observables("heron").name) == ["n"]
    assert store.observables("egret").empty
    assert store.zone("heron") == "UTC"
    with pytest.raises(NotFound):
        store.parameters("nobody")
