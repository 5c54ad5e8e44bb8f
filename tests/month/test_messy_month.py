"""The store after a messy month is the truth, value by value."""

from __future__ import annotations

from collections.abc import Iterator
from datetime import UTC
from pathlib import Path

import numpy as np
import pytest

from nightfold import Store, open_store

from .month import Month, play

Played = tuple[Store, Month]


@pytest.fixture
def played(anywhere: str, tmp_path: Path) -> Iterator[Played]:
    with open_store(anywhere) as store, open_store(anywhere) as other:
        yield store, play(store, other, tmp_path)


def test_the_store_is_the_truth(played: Played) -> None:
    """One run of the month, everything compared: playing it anew for each comparison would take minutes."""
    store, month = played
    compare_shots(store, month)
    compare_scans(store, month)
    compare_nights(store, month)
    compare_derived(store, month)
    compare_sensors(store, month)
    compare_fits(store, month)
    compare_edits(store, month)
    compare_relative(store, month)


def compare_shots(store: Store, month: Month) -> None:
    frame = store.shots(set_aside=True)
    assert sorted(frame.uid) == sorted(month.shots)
    assert frame.started.is_monotonic_increasing
    for uid, true in month.shots.items():
        seen = store.shot(uid)
        assert seen.started.astimezone(UTC) == true.started, uid
        assert (seen.machine, seen.sequence, seen.reference) == ("egret", true.sequence, true.reference), uid
        stated = {name: item.value for name, item in seen.parameters.items() if name != "detuning"}
        assert stated.keys() == true.parameters.keys(), uid
        for name, value in true.parameters.items():
            wanted = pytest.approx(value, rel=1e-14) if isinstance(value, float) else value
            assert stated[name] == wanted, (uid, name)
        read = {name: item for name, item in seen.observables.items() if name != "polarisation"}
        assert read.keys() == true.readings.keys(), uid
        for name, rows in true.readings.items():
            value, stderr, by = rows[-1]
            assert (read[name].value, read[name].stderr, read[name].derivation) == (value, stderr, by), (
                uid,
                name,
            )
        assert seen.set_aside == true.aside, uid
        assert seen.notes == ((true.note,) if true.note else ()), uid
        history = store.history(uid)
        for name, rows in true.readings.items():
            held = [(item.value, item.stderr, item.derivation) for item in history.readings[name]]
            assert held == rows, (uid, name)
        corrected = {event.what: event.old for event in history.events if event.kind == "corrected"}
        assert corrected.keys() == true.recorded.keys(), uid
        for name, value in true.recorded.items():
            wanted = pytest.approx(value, rel=1e-14) if isinstance(value, float) else value
            assert corrected[name] == wanted, (uid, name)


def compare_scans(store: Store, month: Month) -> None:
    members: dict[str, set[str]] = {}
    for uid, key in store.shots(set_aside=True)[["uid", "scan"]].itertuples(index=False):
        if isinstance(key, str):
            members.setdefault(key, set()).add(uid)
    labelled = {key: uids for key, uids in members.items() if "#" in key}
    assert labelled == {key: set(uids) for key, uids in month.labelled.items()}
    assert sorted(map(sorted, (uids for key, uids in members.items() if "#" not in key))) == sorted(
        map(sorted, month.found)
    )
    for key, uids in month.labelled.items():
        scan = store.scan(key)
        aside = sum(month.shots[uid].aside is not None for uid in uids)
        assert (scan.shots, scan.set_aside, scan.complete) == (len(uids) - aside, aside, True), key
        assert [axis.parameter for axis in scan.axes] == ["coil_current"], key
        data = scan.dataset(set_aside=True)
        values = {round(month.shots[uid].parameters["coil_current"], 9) for uid in uids}
        assert sorted(np.round(np.unique(data["coil_current"]), 9)) == sorted(values), key
    clouds = store.scan("two-clouds").dataset()
    assert clouds["atom_number"].dims == ("coil_current", "repeat", "cloud")
    assert list(clouds["cloud"].values) == ["down", "up"]


def compare_nights(store: Store, month: Month) -> None:
    nights = store.nights()
    taken = nights.shots
    assert dict(zip(map(str, nights.night), taken.tolist(), strict=True)) == month.nights


def compare_derived(store: Store, month: Month) -> None:
    """Derived quantities are those of the newest card, with the uncertainty of independent readings."""
    frame = store.shots(["detuning"], ["polarisation", "polarisation_stderr"], set_aside=True).set_index(
        "uid"
    )
    for uid, true in month.shots.items():
        assert frame.detuning[uid] == pytest.approx(2 * true.parameters["aom_frequency"] - 158), uid
        if "atom_number[up]" not in true.readings:
            assert np.isnan(frame.polarisation[uid]), uid
            continue
        up, s_up, _ = true.readings["atom_number[up]"][-1]
        down, s_down, _ = true.readings["atom_number[down]"][-1]
        assert frame.polarisation[uid] == pytest.approx((up - down) / (up + down), rel=1e-12), uid
        assert s_up is not None
        assert s_down is not None
        stderr = 2 * np.hypot(down * s_up, up * s_down) / (up + down) ** 2  # partial derivatives by hand
        assert frame.polarisation_stderr[uid] == pytest.approx(stderr, rel=1e-6), uid


def compare_sensors(store: Store, month: Month) -> None:
    found = store.sensor("room")
    assert [when.to_pydatetime() for when in found["at"]] == sorted(month.room)
    assert found["value"].tolist() == pytest.approx(
        [month.room[when] for when in sorted(month.room)], abs=1e-11
    )
    beside = store.shots(scan="autumn", sensors=["room"])
    for uid, room in zip(beside.uid, beside.room, strict=True):
        started = month.shots[uid].started
        nearest = min(month.room, key=lambda when: abs(when - started))
        assert room == pytest.approx(month.room[nearest], abs=1e-11)


def compare_fits(store: Store, month: Month) -> None:
    """What was fitted before the numbers changed was fitted again to what they are now."""
    kept = {(fit.scan_key, fit.observable): fit for fit in store.fits()}
    assert set(kept) == {("two-clouds#1", "atom_number[up]"), ("two-clouds#1", "polarisation"),
                         ("loss-late#1", "atom_number")}  # fmt: skip
    for (scan, observable), fit in kept.items():
        anew = store.fit(scan, fit.model, observable=observable, keep=False)
        for name, estimate in fit.estimates.items():
            assert estimate.value == pytest.approx(anew.estimates[name].value, rel=1e-9), (
                scan,
                observable,
                name,
            )
    low, high = kept["loss-late#1", "atom_number"].estimates["center"].interval95
    assert low < 61.3 < high


def compare_edits(store: Store, month: Month) -> None:
    """One knob was turned; sweeps, corrections, units and names are no edits."""
    first = min(true.started for true in month.shots.values() if true.parameters["aom_frequency"] == 81.7)
    found = store.edits()
    assert found[["parameter", "old", "new", "sequence"]].values.tolist() == [
        ["aom_frequency", 81.5, 81.7, "loss"]
    ]
    assert found["at"][0].to_pydatetime() == first


def compare_relative(store: Store, month: Month) -> None:
    """Each shot over the straight line between the references before and after it."""
    references = sorted(
        (s.started.timestamp(), s.readings["atom_number"][0][0]) for s in month.shots.values() if s.reference
    )
    table = store.scan("with-references").table(relative_to="reference")
    times, levels = zip(*references, strict=True)
    for uid, ratio in zip(table.uid, table.atom_number, strict=True):
        true = month.shots[uid]
        level = np.interp(true.started.timestamp(), times, levels)
        assert ratio == pytest.approx(true.readings["atom_number"][0][0] / level, rel=1e-12), uid
