"""Kept fits done again after their data changed: by corrections, later readings, shots set aside."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta
from typing import Any

import numpy as np
import pytest

from nightfold import FitResult, FitTable, Model, Store, fit_curve, open_store
from nightfold.fits.again import Refit

START = datetime(2026, 10, 5, 19, tzinfo=UTC)


def records(label: str | None, holds: tuple[float, ...] = (100.0,)) -> list[Any]:
    rng = np.random.default_rng(3)
    made: list[Any] = []
    for hold in holds:
        for current in np.linspace(59, 63, 17):
            number = 1e5 - 4e4 / (1 + (2 * (current - 61 - hold / 1000) / 0.8) ** 2) + 500 * rng.normal()
            made.append({
                "uid": f"{label}-{len(made):03d}", "machine": "heron", "sequence": "hold",
                "started": (START + timedelta(seconds=15 * len(made))).isoformat(), "scan": label,
                "swept": ["coil_current"] if len(holds) == 1 else ["coil_current", "hold_time"],
                "parameters": {
                    "coil_current": {"value": float(current), "unit": "A"},
                    "hold_time": {"value": hold, "unit": "ms"},
                },
                "observables": {"atom_number": number},
            })  # fmt: skip
    return made


def only(done: list[Refit]) -> Refit:
    (one,) = done
    return one


def test_a_corrected_axis_makes_the_fit_stale_and_refit_is_the_fit_by_hand(anywhere: str) -> None:
    with open_store(anywhere) as store:
        store.take(records("loss"))
        store.fit(
            "loss", "lorentzian", observable="atom_number", background="sloped", fixed={"slope": 10.0},
            start={"center": 61.3}, weights="equal", robust=False,
        )  # fmt: skip
        assert store.refit() == []
        store.correct(["loss-004"], {"coil_current": {"value": 60200, "unit": "mA"}}, "typing error")
        (stale,) = store.fits()
        assert stale.stale
        assert [axis.parameter for axis in store.scan("loss").axes] == ["coil_current"]
        done = only(store.refit("loss"))
        assert done.left is None
        assert done.before == stale
        assert done.after is not None
        assert (done.after.replaces, done.after.stale) == (stale.id, False)
        assert done.after.settings == stale.settings
        assert store.fits() == [done.after]
        table = store.scan("loss").table()
        assert 60.2 in table.coil_current.tolist()
        alone = fit_curve(
            table.coil_current, table.atom_number, "lorentzian", background="sloped", fixed={"slope": 10.0},
            weights="equal", robust=False,
        )  # fmt: skip
        center = done.after.estimates["center"]
        assert center.value == pytest.approx(alone.estimates["center"].value, rel=1e-6)
        assert center.value != stale.estimates["center"].value
        assert store.refit() == []


def test_a_correction_of_what_no_fit_rests_on_leaves_them_fresh(store: Store) -> None:
    store.take(records("loss"))
    store.fit("loss", "lorentzian", observable="atom_number")
    store.correct([], {"hold_time": {"value": 120, "unit": "ms"}}, "all were held longer", scan="loss")
    assert not store.fits()[0].stale
    again = store.refit(stale_only=False)
    assert only(again).after == store.fits()[0]


def test_later_readings_and_shots_set_aside(store: Store) -> None:
    store.take(records("loss"))
    store.fit("loss", "lorentzian", observable="atom_number", robust=False)
    store.take([{"uid": "loss-003", "observables": {"atom_number": 9e4}, "derivation": "by hand"}])
    done = only(store.refit())
    assert done.after is not None
    assert done.after.shots == 17
    store.set_aside(["loss-003"], "no atoms")
    done = only(store.refit())
    assert done.after is not None
    assert (done.after.shots, done.after.set_aside) == (16, 1)


def test_slices_are_one_request_and_those_that_are_fresh_stay(anywhere: str) -> None:
    with open_store(anywhere) as store:
        store.take(records("map", (100.0, 200.0, 300.0)))
        store.fit("map", "lorentzian", observable="atom_number", along="coil_current")
        first = store.fits()
        store.set_aside(["map-020"], "no atoms")
        done = store.refit()
        assert [(one.before and one.before.id, one.left) for one in done] == [(first[1].id, None)]
        kept = {fit.slice["hold_time"]: fit for fit in store.fits()}
        assert {fit.id for fit in kept.values()} & {fit.id for fit in first} == {first[0].id, first[2].id}
        assert kept[200.0].replaces == first[1].id
        result = store.fit("map", "lorentzian", observable="atom_number", along="coil_current", keep=False)
        assert isinstance(result, FitTable)
        center = result.estimates["center"].value
        assert [kept[hold].estimates["center"].value for hold in (100.0, 200.0, 300.0)] == list(center)


def test_slices_that_come_and_go(store: Store) -> None:
    store.take(records("map", (100.0, 200.0, 300.0)))
    store.fit("map", "lorentzian", observable="atom_number", along="coil_current")
    uids = [f"map-{number:03d}" for number in range(34, 51)]
    store.correct(uids, {"hold_time": {"value": 350, "unit": "ms"}}, "misread")
    store.set_aside(["map-001"], "no atoms")
    done = store.refit()
    assert [one.before.slice["hold_time"] if one.before else None for one in done] == [100.0, 300.0, None]
    assert done[1].left == "scan map#1 has no slice hold_time 300.0 any more"
    assert done[2].after is not None
    assert done[2].after.slice == {"hold_time": 350.0}
    assert not done[2].after.stale
    assert only(store.refit()).left is not None


def test_a_scan_that_has_other_axes_now_is_left(store: Store) -> None:
    holds = (100.0, 200.0, 300.0, 400.0, 500.0)
    made = records("map", holds)
    for row in made:
        del row["swept"]
    store.take(made)
    store.correct(
        [], {"hold_time": {"value": 100, "unit": "ms"}}, "it never changed", scan="map", even_if_swept=True
    )
    assert [axis.parameter for axis in store.scan("map").axes] == ["coil_current"]
    store.fit("map", "lorentzian", observable="atom_number")
    for row, hold in enumerate(holds[1:], 1):
        uids = [f"map-{number:03d}" for number in range(17 * row, 17 * row + 17)]
        store.correct(uids, {"hold_time": {"value": hold, "unit": "ms"}}, "it did")
    assert {axis.parameter for axis in store.scan("map").axes} == {"coil_current", "hold_time"}
    done = only(store.refit())
    assert done.after is None
    assert done.left == "scan map#1 has several axes now, 5 slices: fit it again with 'along'"


def test_what_cannot_be_done_again_is_left_with_the_reason(store: Store) -> None:
    store.take(records("loss"))
    own = Model(lambda x, a, b: a * np.exp(-b * (x - 59)), start={"b": 0.1}, name="mine")
    store.fit("loss", own, observable="atom_number")
    store.fit("loss", "lorentzian", observable="atom_number")
    store.set_aside([f"loss-{number:03d}" for number in range(15)], "no atoms")
    first, second = store.refit()
    assert first.after is None
    assert first.left == "its model mine is a function of one's own: fit it again from Python"
    assert second.after is None
    assert second.left is not None
    assert len(store.fits()) == 2
    assert all(fit.stale for fit in store.fits())
    store.put_back([f"loss-{number:03d}" for number in range(15)])
    assert not any(fit.stale for fit in store.fits())


def test_fits_by_shot(store: Store) -> None:
    store.take([*records("loss"), *({**row, "sequence": "other"} for row in records("late"))])
    for label in ("loss", "late"):
        assert isinstance(store.fit(label, "lorentzian", observable="atom_number"), FitResult)
    assert [fit.scan_key for fit in store.fits(shots=["late-002"])] == ["late#1"]
    assert [fit.scan_key for fit in store.fits(shots=["late-002", "loss-000"])] == ["loss#1", "late#1"]
    assert store.fits("loss", shots=["late-002"]) == []


def test_fits_of_scans_that_became_one_are_one(anywhere: str) -> None:
    """A late shot between two rounds makes one of them: the fit of it takes the place of both, once and for all."""
    values = [60 + k / 4 for k in range(9)]

    def shots(hours: float, currents: list[float]) -> list[Any]:
        return [
            {
                "machine": "heron",
                "sequence": "hold",
                "scan": "loss",
                "swept": ["coil_current"],
                "started": (START + timedelta(hours=hours, seconds=15 * k)).isoformat(),
                "parameters": {"coil_current": current},
                "observables": {"atom_number": 100 - 50 / (1 + (current - 61) ** 2)},
            }
            for k, current in enumerate(currents)
        ]

    with open_store(anywhere) as store:
        store.take([*shots(0, values), *shots(30, values)])
        for scan in store.scans():
            store.fit(scan.id, "lorentzian", observable="atom_number")
            store.add_note(f"on {scan.key}", fit=store.fits(scan.id)[0].id)
        store.take(shots(15, [61.1]))
        assert len(store.scans()) == 1
        before = store.fits()
        assert [fit.stale for fit in before] == [True, True]
        done = store.refit()
        assert {one.before.id for one in done if one.before} == {fit.id for fit in before}
        (fit,) = store.fits()
        assert not fit.stale
        assert {one.after.id for one in done if one.after} == {fit.id}
        assert store.refit() == []
        assert sorted(store.notes(fit=fit.id)["text"]) == ["on loss#1", "on loss#2"]
