"""Fits of readings relative to reference shots: kept beside plain ones, stale when a reference shot changes."""

from __future__ import annotations

from collections.abc import Iterator
from datetime import UTC, datetime, timedelta
from typing import Any

import numpy as np
import pytest

from nightfold import FitResult, FitTable, Store, fit_curve, open_store
from nightfold.errors import ChoiceNeeded, NoReference
from nightfold.fits.scanfit import FitRequest, fit_slices

START = datetime(2026, 10, 5, 19, tzinfo=UTC)


def records(center: float = 61.3) -> list[dict[str, Any]]:
    """Return a resonance taken upwards while the machine loses half of its atoms, a reference shot every 6 shots."""
    rng = np.random.default_rng(3)
    made: list[dict[str, Any]] = []
    for place in range(72):
        machine = 1e5 * (1 - 0.5 * place / 72)
        reference = place % 6 == 0
        current = 60.0 if reference else 59 + 4 * place / 71
        share = 1.0 if reference else 1 - 0.5 / (1 + (2 * (current - center) / 0.9) ** 2)
        value = share * machine * (1 + 0.01 * rng.normal())
        own = {"reference": True} if reference else {"scan": "loss", "swept": ["coil_current"]}
        made.append(
            {
                "uid": f"shot-{place}",
                "machine": "heron",
                "started": (START + timedelta(seconds=20 * place)).isoformat(),
                "sequence": "hold",
                "parameters": {"coil_current": {"value": current, "unit": "A"}},
                "observables": {"atom_number": {"value": value, "stderr": 0.01 * value, "unit": "atoms"}},
                **own,
            }
        )
    return made


@pytest.fixture
def here(anywhere: str) -> Iterator[Store]:
    with open_store(anywhere) as opened:
        assert not opened.take(records()).refused
        yield opened


def fit(store: Store, **options: Any) -> FitResult:
    result = store.fit("loss", "lorentzian", observable="atom_number", **options)
    assert isinstance(result, FitResult)
    return result


def test_it_is_the_fit_of_the_relative_table_and_finds_the_truth(here: Store) -> None:
    result = fit(here, relative_to="reference", keep=False)
    table = here.scan("loss").table(relative_to="reference")
    alone = fit_curve(
        table["coil_current"],
        table["atom_number"],
        "lorentzian",
        stderr=table["atom_number_stderr"],
        unit_x="A",
    )
    assert result.estimates["center"].value == alone.estimates["center"].value
    assert result.estimates["amplitude"].unit == ""
    assert result.estimates["center"].value == pytest.approx(61.3, abs=0.015)
    assert result.estimates["offset"].value == pytest.approx(1, abs=0.03)
    plain = fit(here, keep=False)
    assert plain.residual_stderr / 1e5 > 2 * result.residual_stderr  # the drift is in the plain one


def test_it_is_kept_beside_the_plain_one(here: Store) -> None:
    fit(here)
    fit(here, relative_to="reference")
    fit(here, relative_to="reference")
    plain, relative = here.fits("loss")
    assert "relative_to" not in plain.settings
    assert relative.settings["relative_to"] == "reference"
    assert relative.settings["reference_within"] == 1800.0
    assert relative.estimates["offset"].unit == ""
    fit(here, relative_to="reference", reference_within="20 min")
    again = here.fits("loss")[1]
    assert again.replaces == relative.id
    assert again.settings["reference_within"] == 1200.0


def test_it_can_be_asked_for_again_from_its_settings(here: Store) -> None:
    result = fit(here, relative_to="reference", reference_within="25 min")
    settings = here.fits("loss")[0].settings
    request = FitRequest(
        "lorentzian",
        "atom_number",
        relative_to=settings["relative_to"],
        reference_within=settings["reference_within"],
    )
    again, _ = fit_slices(here.scan("loss"), request)
    assert isinstance(again, FitResult)
    assert again.estimates["center"].value == result.estimates["center"].value


def test_a_reference_shot_that_changes_makes_it_stale_and_not_the_plain_one(here: Store) -> None:
    fit(here)
    fit(here, relative_to="reference")
    assert [kept.stale for kept in here.fits("loss")] == [False, False]
    assert [kept.stale for kept in here.fits()] == [False, False]
    here.take(
        [{"format": 1, "uid": "shot-30", "observables": {"atom_number": {"value": 9e4, "stderr": 900.0}}}]
    )
    assert [kept.stale for kept in here.fits("loss")] == [False, True]
    assert [kept.stale for kept in here.fits()] == [False, True]
    fit(here, relative_to="reference")
    assert [kept.stale for kept in here.fits("loss")] == [False, False]
    here.set_aside(["shot-30"], "not in the trap")
    assert [kept.stale for kept in here.fits("loss")] == [False, True]


def test_again_brings_it_up_to_date_as_it_was(here: Store) -> None:
    fit(here)
    fit(here, relative_to="reference", reference_within="25 min")
    here.take(
        [{"format": 1, "uid": "shot-30", "observables": {"atom_number": {"value": 7e4, "stderr": 700.0}}}]
    )
    (done,) = here.refit("loss")
    assert done.before is not None
    assert done.after is not None
    assert done.after.settings == done.before.settings
    assert done.after.settings["reference_within"] == 1500.0
    now = fit(here, relative_to="reference", reference_within="25 min", keep=False)
    assert done.after.estimates["center"].value == now.estimates["center"].value
    assert [kept.stale for kept in here.fits("loss")] == [False, False]


def test_a_fit_of_an_observable_with_clouds_wants_one_of_them(here: Store) -> None:
    for record in records():
        clouds = {f"width[{name}]": 10.0 for name in ("up", "down")}
        here.take([{"format": 1, "uid": record["uid"], "observables": clouds}])
    with pytest.raises(
        ChoiceNeeded, match=r"width was read of clouds: name one, width\[down\] or width\[up\]"
    ):
        here.fit("loss", "lorentzian", observable="width")
    assert list(here.scan("loss").dataset(observables=["width"])["cloud"].values) == ["down", "up"]


def test_it_is_stale_when_the_reference_shots_are_gone(here: Store) -> None:
    fit(here, relative_to="reference")
    here.set_aside([f"shot-{place}" for place in range(0, 72, 6)], "laser off")
    assert [kept.stale for kept in here.fits("loss")] == [True]
    with pytest.raises(
        NoReference, match="scan loss#1: atom_number relative to reference shots: found no reference"
    ):
        fit(here, relative_to="reference")


def test_reference_shots_far_later_do_not_make_it_stale(here: Store) -> None:
    fit(here, relative_to="reference")
    late = records()[0] | {"uid": "late", "started": (START + timedelta(hours=20)).isoformat()}
    assert here.take([late]).new == 1
    assert [kept.stale for kept in here.fits("loss")] == [False]


def test_reference_shots_have_their_part_in_what_is_kept(here: Store) -> None:
    result = fit(here, relative_to="reference")
    (kept,) = here.fits("loss")
    assert set(result.shared_stderr) == {*result.estimates, *result.derived}
    assert kept.shared_stderr == result.shared_stderr
    # 12 reference shots of 1 % each: the level far from the line is uncertain by 0.3 to 1 %.
    assert 0.003 < kept.shared_stderr["offset"] < 0.01
    assert kept.estimates["offset"].stderr > kept.shared_stderr["offset"]
    low, high = kept.estimates["offset"].interval95
    assert high - low > 2 * 1.96 * kept.shared_stderr["offset"]
    fit(here, relative_to="reference")
    assert [each.id for each in here.fits("loss")] == [kept.id]  # the same numbers again
    assert fit(here, keep=False).shared_stderr == {}


def test_slices_share_them_too(here: Store) -> None:
    made = records()
    for place, record in enumerate(made):
        if not record.get("reference"):
            record["scan"] = "map"
            record["parameters"]["hold"] = {"value": place % 2, "unit": "s"}
            record["swept"] = ["coil_current", "hold"]
        record["uid"] = f"map-{place}"
        record["machine"] = "egret"
    assert not here.take(made).refused
    table = here.fit(
        "map", "lorentzian", observable="atom_number", along="coil_current", relative_to="reference"
    )
    assert isinstance(table, FitTable)
    assert len(table) == 2
    assert (table.shared_stderr["offset"] > 0.003).all()
    assert (table.estimates["offset"].stderr > table.shared_stderr["offset"]).all()
    assert [kept.shared_stderr["center"] for kept in here.fits("map")] == table.shared_stderr[
        "center"
    ].tolist()


def test_one_by_one_they_are_what_moves_the_fit(here: Store) -> None:
    """Each reference shot moved by its standard uncertainty: the roots of the sums of squares are the shared part."""
    options: dict[str, Any] = {"relative_to": "reference", "weights": "equal", "robust": False, "keep": False}
    before = fit(here, **options)
    facts = here.scan("loss").table(relative_to="reference").attrs["references"]["atom_number"]
    squares = dict.fromkeys(before.estimates, 0.0)
    for record, size in zip(records()[::6], facts["stderr"], strict=True):
        reading = record["observables"]["atom_number"]
        for value in (reading["value"] + 0.1 * size, reading["value"]):
            changed = {"value": value, "stderr": reading["stderr"]}
            here.take([{"format": 1, "uid": record["uid"], "observables": {"atom_number": changed}}])
            if value != reading["value"]:
                now = fit(here, **options)
                for name, estimate in now.estimates.items():
                    squares[name] += (10 * (estimate.value - before.estimates[name].value)) ** 2
    for name, square in squares.items():
        assert before.shared_stderr[name] == pytest.approx(square**0.5, rel=0.05)
