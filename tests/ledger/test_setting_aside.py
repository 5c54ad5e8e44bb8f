"""Shots set aside, with a reason, and put back."""

from __future__ import annotations

from typing import Any

import pytest

from nightfold.errors import NotFound
from nightfold.opening import open_store
from nightfold.store import Store


def shot(number: int, **changes: Any) -> dict[str, Any]:
    return {
        "machine": "heron", "sequence": "s", "started": f"2026-10-05T20:00:{number:02d}Z", "uid": f"shot{number:02d}",
        "parameters": {"a": number}, "observables": {"n": number}, **changes,
    }  # fmt: skip


def test_there_and_back(anywhere: str) -> None:
    with open_store(anywhere) as store:
        store.take([shot(n) for n in range(6)])
        assert store.set_aside(["shot01", "shot03", "shot01"], " laser  unlocked ", by="ann") == 2
        assert store.set_aside(["shot01"], "again") == 0
        assert list(store.shots(["a"]).a) == [0, 2, 4, 5]
        assert list(store.shots(["a"], set_aside=True).a) == [0, 1, 2, 3, 4, 5]
        assert store.shot("shot01").set_aside == "laser  unlocked"
        assert store.put_back(["shot01", "shot02"], by="bob") == 1
        assert store.shot("shot01").set_aside is None
        assert len(store.shots()) == 5
        assert store.set_aside(["shot01"], "after all") == 1
        assert store.shot("shot01").set_aside == "after all"
        assert int(store.nights().set_aside[0]) == 2


def test_failed_shots_are_kept_and_set_aside(store: Store) -> None:
    store.take([shot(0), shot(1, failed="no atoms")])
    assert len(store.shots()) == 1
    assert store.shot("shot01").observables["n"].value == 1
    assert store.set_aside(["shot01"], "mine") == 0
    assert store.put_back(["shot01"]) == 1
    assert len(store.shots()) == 2
    assert store.take([shot(1, failed="no atoms")]).known == 1
    assert len(store.shots()) == 2


def test_the_beginning_of_a_uid(store: Store) -> None:
    store.take(
        [shot(0, uid="abcdef"), shot(1, uid="abcxyz"), shot(2, uid="a%_longer"), shot(3, uid="a__longer")]
    )
    assert store.shot("abcd").uid == "abcdef"
    assert store.shot("a%_l").uid == "a%_longer"
    assert store.set_aside(["abcx"], "why") == 1
    for bad, reason in (
        ("abc", "no such uid"),
        ("abcq", "no such uid"),
        ("", "no such uid"),
        ("%%%%", "no such uid"),
    ):
        with pytest.raises(NotFound, match=f"shot '{bad}': {reason} in this store"):
            store.shot(bad)
    store.take([shot(4, uid="abcdeg")])
    with pytest.raises(NotFound, match="several shots begin so, such as abcde"):
        store.shot("abcd")
    with pytest.raises(NotFound, match="no such uid"):
        store.shot("ABCDEF"[:5])


def test_nothing_is_done_if_one_is_not_there(store: Store) -> None:
    store.take([shot(n) for n in range(3)])
    with pytest.raises(NotFound, match="shot 'nobody'"):
        store.set_aside(["shot00", "nobody"], "why")
    assert len(store.shots()) == 3


@pytest.mark.parametrize("reason", ["", "  ", "a\0b"])
def test_a_reason_is_needed(anywhere: str, reason: str) -> None:
    with open_store(anywhere) as store:
        store.take([shot(0)])
        with pytest.raises(ValueError, match=r"set aside: found .*, wanted a few words that say why"):
            store.set_aside(["shot00"], reason)


def test_very_many(store: Store) -> None:
    store.take(
        [
            shot(0, uid=f"shot{n:05d}", started=f"2026-10-05T20:{n // 60:02d}:{n % 60:02d}Z")
            for n in range(1200)
        ]
    )
    assert store.set_aside([f"shot{n:05d}" for n in range(1200)], "all") == 1200
    assert store.shots().empty
    assert store.put_back([f"shot{n:05d}" for n in range(1200)]) == 1200
