"""Scans joined and split by hand, and back: whatever comes later, and in whatever order."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterable, Sequence
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from nightfold import Scan, Store, open_store
from nightfold.errors import ChoiceNeeded, NotFound

MORE = int(os.environ.get("NIGHTFOLD_MORE_EXAMPLES", "1"))

START = datetime(2026, 10, 5, 19, tzinfo=UTC)
HOUR, DAY = 3600, 86400
GRID = np.linspace(58, 64, 13)
Record = dict[str, Any]


def sweep(
    first: float,
    values: Iterable[float] = GRID,
    name: str = "coil_current",
    label: str | None = None,
    **more: Any,
) -> list[Record]:
    """Return shots 15 s apart that take a parameter through values."""
    own = {"scan": label} if label else {}
    settings = more.pop("parameters", {})
    return [
        {
            "machine": "heron",
            "uid": f"{label or 'free'}-{first + 15 * k:.0f}",
            "started": (START + timedelta(seconds=first + 15 * k)).isoformat(),
            "sequence": "hold",
            "parameters": {"coil_current": 60.0, "hold_time": 120.0, **settings, name: float(value)},
            "observables": {"atom_number": {"value": 1e5 - 3e4 * np.exp(-(float(value) - 61) ** 2), "stderr": 3e3}},
            **own,
            **more,
        }
        for k, value in enumerate(values)
    ]  # fmt: skip


def loss(first: float, values: Iterable[float] = GRID, label: str = "loss", **more: Any) -> list[Record]:
    return sweep(first, values, label=label, swept=["coil_current"], **more)


def content(store: Store) -> list[tuple[Any, ...]]:
    """Return what every scan is, with its id and its shots."""
    return [(scan.id, *rest) for scan, rest in zip(store.scans(), layout(store), strict=True)]


def layout(store: Store) -> list[tuple[Any, ...]]:
    """Return what every scan is, without ids."""
    return [
        (
            scan.label, scan.round, scan.origin, [axis.parameter for axis in scan.axes],
            tuple(scan.table(set_aside=True)["uid"]), scan.complete,
        )
        for scan in store.scans()
    ]  # fmt: skip


def sizes(store: Store) -> list[tuple[str, int]]:
    return [(scan.key, scan.shots) for scan in store.scans()]


def take(store: Store, records: Sequence[Record], batch: int = 1000) -> None:
    for start in range(0, len(records), batch):
        outcome = store.take(list(records[start : start + batch]))
        assert not outcome.refused, outcome.refused


@pytest.fixture
def rounds(anywhere: str) -> Iterable[Store]:
    """Return a store with three rounds of a label, two days apart, each with a fit."""
    with open_store(anywhere) as store:
        take(store, [*loss(0), *loss(2 * DAY), *loss(4 * DAY)])
        for key in ("loss#1", "loss#2", "loss#3"):
            store.fit(key, "lorentzian", observable="atom_number")
        yield store


def test_join_brings_all_shots_into_the_earliest(rounds: Store) -> None:
    joined = rounds.join_scans(["loss#3", "loss#1"], reason="broken off at midnight", by="ida")
    assert isinstance(joined, Scan)
    assert (joined.key, joined.id, joined.shots) == ("loss#1", 1, 26)
    assert sizes(rounds) == [("loss#1", 26), ("loss#2", 13)]
    assert dict(joined.dataset().sizes) == {"coil_current": 13, "repeat": 2}
    (step,) = rounds.arrangements().to_dict("records")
    assert (step["number"], step["kind"], step["by"], step["reason"]) == (
        1,
        "join",
        "ida",
        "broken off at midnight",
    )
    assert (step["before"], step["after"], step["shots"]) == (("loss#1", "loss#3"), ("loss#1",), 26)
    assert [(fit.scan_key, fit.stale) for fit in rounds.fits()] == [
        ("loss#1", True), ("loss#2", False), ("loss#3", True),
    ]  # fmt: skip


def test_undoing_a_join_brings_back_ids_rounds_and_fits(rounds: Store) -> None:
    before = content(rounds)
    rounds.join_scans(["loss#1", "loss#3"])
    undone = rounds.undo_arrangement(1, by="leo")
    assert (undone.kind, undone.undone_by, undone.before, undone.after) == (
        "join",
        "leo",
        ("loss#1", "loss#3"),
        ("loss#1",),
    )
    assert content(rounds) == before
    assert not any(fit.stale for fit in rounds.fits())
    with pytest.raises(ChoiceNeeded, match="arrangement 1: it was undone before"):
        rounds.undo_arrangement(1)


def test_what_was_undone_is_told_as_it_was(rounds: Store) -> None:
    """Also where the shots have come elsewhere since; a scan that is gone has its id, which no other one gets."""
    rounds.split_scan("loss#1", at=6)
    gone = rounds.scan("loss#4").id
    rounds.undo_arrangement(1)
    rounds.join_scans(["loss#1", "loss#2"])
    take(rounds, loss(9 * DAY, label="width"))
    assert rounds.scan("width").id > gone
    before, after, shots = (rounds.arrangements()[name].iloc[0] for name in ("before", "after", "shots"))
    assert (before, after, shots) == (("loss#1",), ("loss#1", str(gone)), 13)


def test_a_scan_whose_shots_were_brought_elsewhere_says_so(rounds: Store) -> None:
    rounds.join_scans(["loss#1", "loss#3"])
    with pytest.raises(
        NotFound, match=r"'loss#3': its shots were brought into loss#1 by hand; 'nightfold join --undo 1'"
    ):
        rounds.scan("loss#3")
    with pytest.raises(NotFound, match="brought into loss#1"):
        rounds.join_scans(["loss#2", "loss#3"])
    assert rounds.scan("loss").key == "loss#1"  # the round with the latest shot


@pytest.mark.parametrize(
    ("at", "first"),
    [
        (5, 5),
        ("loss-75", 5),
        (START + timedelta(seconds=70), 5),
        ((START + timedelta(seconds=75)).isoformat(), 5),
        ("2026-10-05T19:01:00", 4),
    ],
)
def test_split(anywhere: str, at: Any, first: int) -> None:
    with open_store(anywhere) as store:
        take(store, [*loss(0), *loss(2 * DAY)])
        store.fit("loss#1", "lorentzian", observable="atom_number")
        one, other = store.split_scan("loss#1", at=at, reason="the laser was relocked")
        assert [(scan.key, scan.shots) for scan in (one, other)] == [
            ("loss#1", first),
            ("loss#3", 13 - first),
        ]
        assert one.last < other.first
        assert [axis.parameter for axis in (*one.axes, *other.axes)] == ["coil_current"] * 2
        assert store.scan("loss").key == "loss#2"  # the newest is that with the latest shot
        store.undo_arrangement(1)
        assert sizes(store) == [("loss#1", 13), ("loss#2", 13)]
        assert [fit.stale for fit in store.fits()] == [False]


def test_what_was_fitted_after_a_split_goes_back_with_the_shots(rounds: Store) -> None:
    _, other = rounds.split_scan("loss#1", at=6)
    rounds.fit(other, "gaussian", observable="atom_number")
    rounds.add_note("only the rising side", scan=other.id)
    rounds.undo_arrangement(1)
    assert [(fit.model, fit.stale) for fit in rounds.fits("loss#1")] == [
        ("lorentzian", False),
        ("gaussian", True),
    ]
    assert rounds.notes(scan="loss#1")["text"].tolist() == ["only the rising side"]


@pytest.mark.parametrize(
    ("at", "problem", "kind"),
    [
        (0, "all its 13 shots would be on one side, wanted a count from 1 to 12", ChoiceNeeded),
        (20, "on one side, wanted a count from 1 to 12", ChoiceNeeded),
        ("2026-10-04", "on one side", ChoiceNeeded),
        ("loss-0", "on one side", ChoiceNeeded),
        ("loss-1", "shots of it begin so", NotFound),
        ("los", "at least 4 letters", NotFound),
        ("yesterday", "none of its shots begins so, and it is no time", NotFound),
    ],
)
def test_refused_splits_change_nothing(rounds: Store, at: Any, problem: str, kind: type[Exception]) -> None:
    before = content(rounds)
    with pytest.raises(kind, match=rf"split loss#1 (at|after) .*{problem}"):
        rounds.split_scan("loss#1", at=at)
    assert content(rounds) == before
    assert rounds.arrangements().empty


def test_refused_joins(rounds: Store) -> None:
    other = [
        record | {"sequence": "release", "uid": f"r{k}"} for k, record in enumerate(loss(0, label="width"))
    ]
    take(rounds, other)
    with pytest.raises(ChoiceNeeded, match=r"found one scan .*wanted two or more"):
        rounds.join_scans(["loss#1", 1])
    with pytest.raises(
        ChoiceNeeded, match=r"several sequences .loss#1 of hold on heron, width#1 of release on heron"
    ):
        rounds.join_scans(["loss#1", "width"])
    with pytest.raises(NotFound, match="scan 'lost'"):
        rounds.join_scans(["loss#1", "lost"])
    with pytest.raises(NotFound, match="arrangement 7: not in this store"):
        rounds.undo_arrangement(7)
    assert rounds.arrangements().empty


def test_only_the_last_arrangement_of_a_shot_can_be_undone(rounds: Store) -> None:
    before = content(rounds)
    rounds.join_scans(["loss#1", "loss#2"])
    rounds.split_scan("loss#1", at=20)
    rounds.join_scans(["loss#3", "loss#4"])
    assert sizes(rounds) == [("loss#1", 20), ("loss#4", 19)]
    with pytest.raises(
        ChoiceNeeded, match="arrangement 1: arrangements 2, 3 moved the same shots later; undo 3 first"
    ):
        rounds.undo_arrangement(1)
    for number in (3, 2, 1):
        rounds.undo_arrangement(number)
    assert content(rounds) == before
    assert not any(fit.stale for fit in rounds.fits())
    assert rounds.arrangements()["undone"].notna().all()


def test_a_mistyped_label_is_joined_and_its_records_are_known_again(anywhere: str) -> None:
    wrong = loss(300, label="los")
    with open_store(anywhere) as store:
        take(store, [*loss(0), *wrong])
        store.join_scans(["loss", "los"])
        assert sizes(store) == [("loss#1", 26)]
        assert store.take(wrong).known == 13
        late = [wrong[4] | {"observables": {"atom_number": {"value": 9e4, "stderr": 3e3}}}]
        outcome = store.take(late)
        assert (outcome.amended, outcome.refused) == (1, [])
        take(
            store, loss(900, GRID[:3], label="los")
        )  # still mistyped: a round of its own, to be joined as well
        assert sizes(store) == [("loss#1", 26), ("los#2", 3)]
        store.undo_arrangement(1)
        assert sizes(store) == [("loss#1", 13), ("los#1", 16)]


def test_a_late_shot_of_a_label_that_was_joined_into_another_opens_a_round(anywhere: str) -> None:
    wrong = loss(300, label="los")
    with open_store(anywhere) as store:
        take(store, [*loss(0), *wrong[:6], *wrong[7:]])
        store.join_scans(["loss", "los"])
        store.take(wrong[6:7])
        assert sizes(store) == [("loss#1", 25), ("los#2", 1)]
        store.undo_arrangement(1)
        assert sizes(store) == [("loss#1", 13), ("los#1", 13)]


def test_the_label_goes_on_with_an_arranged_round(rounds: Store) -> None:
    rounds.split_scan("loss#3", at=7)
    take(rounds, loss(4 * DAY + HOUR, label="loss"), batch=4)
    assert sizes(rounds) == [("loss#1", 13), ("loss#2", 13), ("loss#3", 7), ("loss#4", 19)]
    take(rounds, loss(8 * DAY), batch=4)
    assert sizes(rounds)[-1] == ("loss#5", 13)
    rounds.undo_arrangement(1)
    assert sizes(rounds) == [("loss#1", 13), ("loss#2", 13), ("loss#3", 26), ("loss#4", 13)]


def test_an_arranged_round_keeps_its_number_when_late_shots_make_an_earlier_one(rounds: Store) -> None:
    rounds.join_scans(["loss#2", "loss#3"])
    take(rounds, loss(-6 * DAY))
    assert sizes(rounds) == [("loss#1", 13), ("loss#4", 13), ("loss#2", 26)]
    rounds.undo_arrangement(1)
    assert sizes(rounds) == [("loss#1", 13), ("loss#2", 13), ("loss#3", 13), ("loss#4", 13)]


def test_planned_shots_count_as_if_nothing_had_been_arranged(anywhere: str) -> None:
    planned = [record | {"planned_shots": 13} for record in loss(0)]
    again = [record | {"planned_shots": 13} for record in loss(HOUR)]
    with open_store(anywhere) as store:
        take(store, planned)
        store.split_scan("loss", at=6)
        take(store, again, batch=3)
        assert sizes(store) == [("loss#1", 6), ("loss#2", 7), ("loss#3", 13)]


def test_a_late_shot_of_an_arranged_scan_finds_its_place(rounds: Store) -> None:
    rounds.split_scan("loss#2", at=7)
    take(rounds, [loss(2 * DAY + seconds, [60.0])[0] for seconds in (-20, 40, 2000)])
    assert sizes(rounds) == [("loss#1", 13), ("loss#2", 9), ("loss#4", 7), ("loss#3", 13)]


def test_found_scans_joined_and_split(anywhere: str) -> None:
    with open_store(anywhere) as store:
        take(store, [*sweep(0), *sweep(2 * HOUR, np.linspace(20, 400, 13), "hold_time"), *sweep(4 * HOUR)])
        before = content(store)
        assert [scan.origin for scan in store.scans()] == ["found"] * 3
        store.fit(1, "lorentzian", observable="atom_number")
        joined = store.join_scans([1, 3])
        assert [(scan.id, scan.shots) for scan in store.scans()] == [(1, 26), (2, 13)]
        assert [axis.parameter for axis in joined.axes] == ["coil_current"]
        take(store, sweep(2 * HOUR + 13 * 15, [420.0, 440.0], "hold_time"))  # shots nearby fold as ever
        assert [(scan.id, scan.shots) for scan in store.scans()] == [(1, 26), (2, 15)]
        store.split_scan(2, at=13)
        store.undo_arrangement(2)
        store.undo_arrangement(1)
        after = [
            entry if entry[0] != 2 else (*entry[:5], entry[5][:13], *entry[6:]) for entry in content(store)
        ]
        assert after == before
        assert not any(fit.stale for fit in store.fits())


def test_lines_of_a_map_joined_have_both_axes(anywhere: str) -> None:
    with open_store(anywhere) as store:
        for line in range(5):
            take(
                store,
                sweep(line * HOUR, parameters={"hold_time": 50.0 * (line + 1)}),
            )
        scan = store.join_scans([scan.id for scan in store.scans()])
        assert dict(scan.dataset().sizes) == {"coil_current": 13, "hold_time": 5}


def test_labelled_and_found_scans_joined(anywhere: str) -> None:
    with open_store(anywhere) as store:
        take(store, [*sweep(0), *loss(HOUR)])
        before = content(store)
        joined = store.join_scans(["loss", 1])
        assert (joined.key, joined.shots, joined.origin) == ("1", 26, "found")
        take(store, loss(2 * HOUR), batch=5)
        assert sizes(store) == [("1", 26), ("loss#2", 13)]
        store.undo_arrangement(1)
        assert [entry[:5] for entry in content(store)] == [entry[:5] for entry in before]
        assert sizes(store) == [("1", 13), ("loss#1", 26)]


_LATE = [*loss(-30 * HOUR), *loss(195), *loss(20 * HOUR, GRID[:4]), *loss(2 * DAY - 52), *loss(9 * DAY)]
_EARLY = [*loss(0), *loss(2 * DAY), *loss(4 * DAY)]


def _two_and_three(store: Store) -> None:
    store.join_scans(["loss#2", "loss#3"])


def _halves(store: Store) -> None:
    store.split_scan("loss#1", at=6)
    store.split_scan("loss#3", at=9)


def _outer(store: Store) -> None:
    store.join_scans(["loss#1", "loss#3"])
    store.split_scan("loss#1", at=15)


@pytest.mark.parametrize("arrange", [_two_and_three, _halves, _outer])
@given(st.permutations(range(len(_LATE))), st.integers(1, 40))
@settings(max_examples=4 * MORE, deadline=None)
def test_order_of_arrival_cannot_change_what_becomes_of_an_arranged_label(
    tmp_path_factory: pytest.TempPathFactory, arrange: Callable[[Store], None], order: list[int], batch: int
) -> None:
    folder = tmp_path_factory.mktemp("order")
    with (
        open_store(folder / "a.sqlite", create=True) as straight,
        open_store(folder / "b.sqlite", create=True) as mixed,
    ):
        for store in (straight, mixed):
            take(store, _EARLY)
            arrange(store)
        take(straight, _LATE)
        take(mixed, [_LATE[k] for k in order], batch)
        assert layout(mixed) == layout(straight)
        for number in straight.arrangements()["number"][::-1]:
            straight.undo_arrangement(number)
        with open_store(folder / "c.sqlite", create=True) as never:
            take(never, [*_EARLY, *_LATE])
            assert layout(straight) == layout(never)


_FREE = [*sweep(0), *sweep(HOUR, GRID[::-1]), *sweep(3 * HOUR, np.linspace(20, 400, 20), "hold_time")]
_FREE_LATE = [
    *sweep(195 + 15, GRID[:5]),
    *sweep(HOUR - 90, [60.5, 61.5]),
    *sweep(3 * HOUR + 300, np.linspace(420, 600, 10), "hold_time"),
    *sweep(6 * HOUR),
]


@given(st.permutations(range(len(_FREE_LATE))), st.integers(1, 40))
@settings(max_examples=4 * MORE, deadline=None)
def test_order_of_arrival_cannot_change_what_is_found_around_arranged_scans(
    tmp_path_factory: pytest.TempPathFactory, order: list[int], batch: int
) -> None:
    folder = tmp_path_factory.mktemp("order")
    with (
        open_store(folder / "a.sqlite", create=True) as straight,
        open_store(folder / "b.sqlite", create=True) as mixed,
    ):
        for store in (straight, mixed):
            take(store, _FREE)
            store.join_scans([1, 2])
            store.split_scan(1, at=10)
        take(straight, _FREE_LATE)
        take(mixed, [_FREE_LATE[k] for k in order], batch)
        assert layout(mixed) == layout(straight)
        for number in (2, 1):
            mixed.undo_arrangement(number)
        with open_store(folder / "c.sqlite", create=True) as never:
            take(never, [*_FREE, *_FREE_LATE])
            assert layout(mixed) == layout(never)


def test_a_place_outside_is_answered_in_the_time_of_the_machine(store: Store, tmp_path: Path) -> None:
    card = tmp_path / "heron.toml"
    card.write_text('machine = "heron"\nzone = "America/New_York"\n')
    store.use_card(card)
    take(store, loss(0))
    with pytest.raises(
        ChoiceNeeded, match="wanted a place between 2026-10-05T15:00:00-04:00 and 2026-10-05T15:03"
    ):
        store.split_scan("loss", at="2026-10-05T21:01")
    assert [scan.shots for scan in store.split_scan("loss", at="2026-10-05T15:01")] == [4, 9]
    store.undo_arrangement(1)
    with pytest.raises(ChoiceNeeded, match=r"undone before, on \d{4}-\d\d-\d\dT\d\d:\d\d:\d\d-0[45]:00$"):
        store.undo_arrangement(1)
