"""Derived quantities in scans: as axes, as followers, as coordinates on several axes, as observables, and in fits."""

from __future__ import annotations

import itertools
import os
import random
import shutil
from collections.abc import Sequence
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from nightfold import Store, open_store
from nightfold.errors import CardError, FitError
from nightfold.fits.many import FitTable
from nightfold.fits.result import FitResult
from nightfold.fits.scanfit import digest_data
from nightfold.intake.csvfile import CsvColumns
from nightfold.scans.scan import Scan

MORE = int(os.environ.get("NIGHTFOLD_MORE_EXAMPLES", "1"))

CARD = """\
machine = "heron"
main_observable = "polarisation"
[parameters.aom_frequency]
unit = "MHz"
[parameters.shift]
unit = "MHz"
[parameters.hold_time]
unit = "ms"
[observables.atom_number]
unit = "atoms"
[derived.detuning]
expression = "2*aom_frequency + shift - 160 MHz"
description = "of the imaging light"
[derived.phase]
expression = "2*pi*(1 rad)*hold_time*(1 kHz) * detuning / (1 MHz)"
[derived.linewidths]
expression = "detuning / 6 MHz"
[derived.polarisation]
expression = "(atom_number[up] - atom_number[down]) / (atom_number[up] + atom_number[down])"
[derived."share[up]"]
expression = "atom_number[up] / (atom_number[up] + atom_number[down])"
"""
START = datetime(2026, 10, 5, 19, tzinfo=UTC)
AOM = [80 + k / 4 for k in range(-8, 9)]
_numbers = itertools.count()


@pytest.fixture
def card(tmp_path: Path) -> Path:
    path = tmp_path / "heron.toml"
    path.write_text(CARD, encoding="utf-8")
    return path


@pytest.fixture
def ready(store: Store, card: Path) -> Store:
    store.use_card(card)
    return store


def shot(
    second: float, aom: float = 80.0, *, hold: float = 3.0, shift: float = 0.0, **fields: Any
) -> dict[str, Any]:
    polarisation = 0.6 / (1 + ((2 * aom + shift - 160) / 1.5) ** 2) - 0.1
    return {
        "machine": "heron",
        "sequence": "image",
        "started": (START + timedelta(seconds=second)).isoformat(),
        "parameters": {"aom_frequency": aom, "hold_time": hold, "shift": shift},
        "observables": {
            "atom_number[up]": {"value": 5e4 * (1 + polarisation), "stderr": 500},
            "atom_number[down]": {"value": 5e4 * (1 - polarisation), "stderr": 500},
        },
        **fields,
    }


def sweep(first: float, aoms: Sequence[float] = AOM, **fields: Any) -> list[dict[str, Any]]:
    return [shot(first + 15 * k, aom, **fields) for k, aom in enumerate(aoms)]


def axes(scan: Scan) -> list[str]:
    return [axis.parameter for axis in scan.axes]


@pytest.mark.parametrize("anywhere", ["sqlite", "postgresql"], indirect=True)
def test_from_the_record_to_the_fit(anywhere: str, card: Path) -> None:
    with open_store(anywhere) as store:
        store.use_card(card)
        store.take(sweep(0, scan="line", swept=["aom_frequency"]))
        scan = store.scan("line")
        assert axes(scan) == ["aom_frequency"]
        assert scan.followers == {
            "detuning": "aom_frequency",
            "linewidths": "aom_frequency",
            "phase": "aom_frequency",
        }
        assert scan.main_observable == "polarisation"
        data = scan.dataset()
        detuning = np.array([2 * aom - 160 for aom in AOM])
        assert data["detuning"].dims == ("aom_frequency",)
        assert data["detuning"].to_numpy() == pytest.approx(detuning)
        assert data["detuning"].attrs["units"] == "MHz"
        assert data["detuning"].attrs["long_name"] == "of the imaging light"
        assert data["detuning"].attrs["co_moving_with"] == "aom_frequency"
        up, down = data["atom_number"].sel(cloud="up"), data["atom_number"].sel(cloud="down")
        assert data["polarisation"].dims == ("aom_frequency",)
        assert data["polarisation"].to_numpy() == pytest.approx(((up - down) / (up + down)).to_numpy())
        stderr = 1000 * (up**2 + down**2) ** 0.5 / (up + down) ** 2
        assert data["polarisation_stderr"].to_numpy() == pytest.approx(stderr.to_numpy())
        assert data["share"].dims == ("aom_frequency", "cloud")
        assert data["share"].sel(cloud="up").to_numpy() == pytest.approx((up / (up + down)).to_numpy())
        fit = store.fit("line", "lorentzian", observable="polarisation", along="detuning")
        assert isinstance(fit, FitResult)
        assert fit.estimates["center"].value == pytest.approx(0, abs=1e-6)
        assert fit.estimates["fwhm"].value == pytest.approx(1.5 * 2)
        assert fit.estimates["fwhm"].unit == "MHz"
        kept = store.fits("line")[0]
        assert kept.settings["derived"] == {"detuning": "1", "polarisation": "1"}
        assert not kept.stale
        store.take([*sweep(1000, scan="by-detuning", swept=["detuning"]), *sweep(2000, swept=["detuning"])])
        assert [axes(scan) for scan in store.scans()] == [["aom_frequency"], ["detuning"], ["detuning"]]
        assert store.edits().empty
        card.write_text(CARD.replace("160 MHz", "161 MHz"), encoding="utf-8")
        store.use_card(card)
        assert [fit.stale for fit in store.fits()] == [True]
        assert store.derived(versions=True).query("name == 'detuning'")["version"].tolist() == ["1", "2"]
        card.write_text(CARD.replace("detuning", "offset"), encoding="utf-8")
        with pytest.raises(CardError, match=r"derived.detuning: found nothing"):
            store.use_card(card)
        card.write_text(CARD.replace("share[up]", "part[up]"), encoding="utf-8")
        store.use_card(card)
        assert "share[up]" not in store.observables()["name"].tolist()


@pytest.mark.parametrize("label", ["line", None])
def test_a_sweep_declared_of_a_derived_parameter_goes_along_it(ready: Store, label: str | None) -> None:
    ready.take(sweep(0, swept=["detuning"], scan=label))
    (scan,) = ready.scans()
    assert (axes(scan), scan.shots) == (["detuning"], len(AOM))
    assert scan.axes[0].unit == "MHz"
    assert scan.followers["aom_frequency"] == "detuning"
    assert scan.dataset()["aom_frequency"].to_numpy() == pytest.approx(AOM)
    assert ready.fit(scan, "lorentzian", observable="polarisation").estimates["fwhm"].value == pytest.approx(
        3
    )
    assert ready.edits().empty


def test_two_points_are_no_edits_either(ready: Store) -> None:
    ready.take(sweep(0, [80, 81, 80, 81], swept=["detuning"]))
    assert ready.edits().empty
    ready.take(sweep(600, [80, 80]) + sweep(700, [82, 82]))
    assert ready.edits()[["parameter", "old", "new"]].to_numpy().tolist() == [["aom_frequency", 80.0, 82.0]]


def test_of_two_inputs_that_move_the_derived_one_is_the_axis(ready: Store) -> None:
    records = [shot(15 * k, 80 + k, shift=(-1) ** k * 0.5, swept=["detuning"], scan="both") for k in range(6)]
    ready.take(records)
    scan = ready.scan("both")
    assert axes(scan) == ["detuning"]
    assert scan.axes[0].values == (0.5, 1.5, 4.5, 5.5, 8.5, 9.5)
    assert scan.dataset().sizes == {"detuning": 6, "cloud": 2}


def test_a_derived_parameter_and_another_make_two_axes(ready: Store) -> None:
    points = [(aom, hold) for aom in AOM[::4] for hold in (1.0, 2.0, 4.0)]
    ready.take(
        [
            shot(15 * k, a, hold=h, swept=["detuning", "hold_time"], scan="map")
            for k, (a, h) in enumerate(points)
        ]
    )
    scan = ready.scan("map")
    assert axes(scan) == ["detuning", "hold_time"]
    assert scan.mixed == {"phase": ("detuning", "hold_time")}
    phase = scan.dataset()["phase"]
    assert phase.dims == ("detuning", "hold_time")
    wanted = 2 * np.pi * phase["hold_time"] * phase["detuning"]
    assert phase.transpose("hold_time", "detuning").to_numpy() == pytest.approx(wanted.to_numpy())
    with pytest.raises(
        FitError, match=r"phase depends on several axes \(detuning, hold_time\); fit along one"
    ):
        ready.fit("map", "lorentzian", observable="polarisation", along="phase")
    slices = ready.fit("map", "lorentzian", observable="polarisation", along="linewidths")
    assert isinstance(slices, FitTable)
    assert len(slices.slices) == 3


def test_another_sweep_of_the_same_label_is_another_round(ready: Store) -> None:
    records = [
        *sweep(0, scan="line", swept=["detuning"]),
        *sweep(1000, scan="line", swept=["aom_frequency"]),
    ]
    ready.take(records)
    assert [(scan.key, axes(scan)) for scan in ready.scans()] == [
        ("line#1", ["detuning"]),
        ("line#2", ["aom_frequency"]),
    ]


def test_an_edit_of_another_input_ends_an_unlabelled_sweep(ready: Store) -> None:
    ready.take([*sweep(0, swept=["detuning"]), *sweep(300, swept=["detuning"], shift=0.4)])
    assert [scan.shots for scan in ready.scans()] == [17, 17]
    assert ready.edits()[["parameter", "new"]].to_numpy().tolist() == [["shift", 0.4]]


@settings(max_examples=5 * MORE)
@given(order=st.permutations(range(40)), sizes=st.lists(st.integers(1, 9), min_size=40, max_size=40))
def test_the_order_of_arrival_changes_nothing(
    empty_store: Path, tmp_path: Path, order: list[int], sizes: list[int]
) -> None:
    records = [
        *sweep(0, AOM[:10], scan="line", swept=["detuning"]),
        *sweep(200, AOM[:10], scan="line", swept=["aom_frequency"]),
        *sweep(400, AOM[:10], swept=["detuning"]),
        *sweep(600, AOM[:10], swept=["aom_frequency"]),
    ]
    path = tmp_path / "heron.toml"
    path.write_text(CARD, encoding="utf-8")
    found = []
    for places in (list(range(40)), order):
        where = tmp_path / f"{next(_numbers)}.sqlite"
        where.write_bytes(empty_store.read_bytes())
        with open_store(where) as store:
            store.use_card(path)
            rest, steps = [records[place] for place in places], iter(sizes)
            while rest:
                size = next(steps)
                store.take(rest[:size])
                rest = rest[size:]
            found.append(
                [(scan.label, scan.round, axes(scan), scan.shots, scan.followers) for scan in store.scans()]
            )
    assert found[0] == found[1]
    assert [entry[2] for entry in found[0]] == [["detuning"], ["aom_frequency"]] * 2


def test_found_scans_are_found_as_before(
    store: Store, ready: Store, empty_store: Path, tmp_path: Path
) -> None:
    values = [*AOM, *AOM]
    random.Random(3).shuffle(values)
    plain = tmp_path / "plain.sqlite"
    plain.write_bytes(empty_store.read_bytes())
    ready.take(sweep(0, values))
    with open_store(plain) as other:
        other.take(sweep(0, values))
        assert [(axes(scan), scan.shots) for scan in other.scans()] == [(["aom_frequency"], 34)]
    (scan,) = ready.scans()
    assert (axes(scan), scan.shots, scan.origin) == (["aom_frequency"], 34, "found")
    assert "detuning" in scan.followers


def test_fits_follow_a_change_of_the_card(ready: Store, card: Path) -> None:
    ready.take(sweep(0, scan="line", swept=["detuning"]))
    ready.fit("line", "lorentzian", observable="polarisation")
    ready.fit("line", "lorentzian", observable="atom_number[up]", along="aom_frequency")
    card.write_text(CARD.replace("160 MHz", "161 MHz"), encoding="utf-8")
    ready.use_card(card)
    old, other = ready.fits()
    assert (old.stale, old.settings["derived"]) == (True, {"detuning": "1", "polarisation": "1"})
    assert (other.stale, "derived" in other.settings) == (False, False)
    ready.fit("line", "lorentzian", observable="polarisation")
    new = ready.fits()[-1]
    assert (new.replaces, new.stale, new.settings["derived"]["detuning"]) == (old.id, False, "2")
    assert new.estimates["center"].value == pytest.approx(-1, abs=1e-6)


def test_a_fit_of_a_quantity_that_is_gone_is_stale(ready: Store, card: Path) -> None:
    ready.take(sweep(0, scan="line", swept=["detuning"]))
    ready.fit("line", "lorentzian", observable="polarisation")
    card.write_text(CARD.replace("polarisation", "imbalance"), encoding="utf-8")
    ready.use_card(card)
    (kept,) = ready.fits()
    assert (kept.observable, kept.stale) == ("polarisation", True)
    assert "polarisation" not in ready.scan("line").observables
    assert ready.scan("line").main_observable == "imbalance"


def test_a_derived_observable_is_there_where_all_its_readings_are(ready: Store) -> None:
    ready.take(sweep(0, scan="one", swept=["detuning"], observables={"atom_number[up]": 1e4}))
    assert ready.scan("one").observables == ("atom_number[up]",)


def test_the_last_digits_of_a_derived_value_make_no_fit_stale(ready: Store) -> None:
    ready.take(sweep(0, scan="line", swept=["detuning"]))
    table = ready.scan("line").table()
    assert {"detuning", "polarisation"} <= set(table.attrs["derived"])
    wanted = digest_data(table, "detuning", "polarisation")
    for column in ("detuning", "polarisation", "polarisation_stderr"):
        changed = table.copy()
        changed[column] *= 1 + 1e-15
        assert digest_data(changed, "detuning", "polarisation") == wanted
        changed[column] *= 1 + 1e-8
        assert digest_data(changed, "detuning", "polarisation") != wanted


def test_set_aside_shots_and_repeats(ready: Store) -> None:
    ready.take([*sweep(0, scan="line", swept=["detuning"]), *sweep(300, scan="line", swept=["detuning"])])
    ready.set_aside([ready.shots()["uid"][0]], "cloud")
    data = ready.scan("line").dataset()
    assert data.sizes["repeat"] == 2
    assert int(data["polarisation"].notnull().sum()) == 33


def test_an_exported_table_is_taken_again(ready: Store, tmp_path: Path) -> None:
    ready.take(sweep(0, scan="line", swept=["aom_frequency"]))
    table = ready.scan("line").table()
    path = tmp_path / "line.csv"
    table.drop(columns=["uid", "shot_id", "set_aside"]).assign(shift=0.0).to_csv(path, index=False)
    columns = CsvColumns(sequence="again", scan="again", swept=("detuning",))
    again = ready.take_file(path, columns=columns)
    assert (again.new, again.refused) == (17, [])
    assert axes(ready.scan("again")) == ["detuning"]
    assert ready.scan("again").table()["polarisation"].tolist() == table["polarisation"].tolist()


@pytest.mark.parametrize("label", [None, "line"])
def test_scans_follow_a_change_of_the_card_as_if_it_had_been_there_before(
    anywhere: str, empty_store: Path, tmp_path: Path, label: str | None
) -> None:
    """The axis stands still by the new expression, and what moved no longer goes along with it."""
    path = tmp_path / "heron.toml"
    said: dict[str, Any] = {"swept": ["detuning"]} | ({"scan": label} if label else {})
    records = [shot(15 * k, aom, **said) for k, aom in enumerate(AOM)]
    records += [shot(3600 + 15 * k, 80, shift=k / 2, hold=4 + k % 2, **said) for k in range(8)]

    def seen(store: Store) -> list[Any]:
        return [
            (scan.key, scan.shots, axes(scan), [axis.points for axis in scan.axes], scan.followers)
            for scan in store.scans()
        ]

    def use(store: Store, expression: str) -> None:
        path.write_text(CARD.replace("2*aom_frequency + shift - 160 MHz", expression), encoding="utf-8")
        store.use_card(path)

    with open_store(anywhere) as store:
        use(store, "2*aom_frequency - 160 MHz")
        store.take(records)
        first = seen(store)
        use(store, "shift + 3 MHz")
        other = tmp_path / "other.sqlite"
        shutil.copy(empty_store, other)
        with open_store(other) as fresh:
            use(fresh, "shift + 3 MHz")
            fresh.take(records)
            assert sorted(map(repr, seen(store))) == sorted(map(repr, seen(fresh)))
        use(store, "2*aom_frequency - 160 MHz")
        assert sorted(map(repr, seen(store))) == sorted(map(repr, first))
