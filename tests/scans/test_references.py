"""Scans relative to reference shots, in the store: which ones count, what comes out, what is refused."""

from __future__ import annotations

from collections.abc import Iterator
from datetime import UTC, datetime, timedelta
from math import hypot
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import xarray as xr

from nightfold import Store, open_store
from nightfold.errors import ChoiceNeeded, NoReference, NotFound
from nightfold.scans.netcdf import read_netcdf, write_netcdf
from nightfold.scans.references import read_within, span_text

START = datetime(2026, 10, 5, 19, tzinfo=UTC)
Record = dict[str, Any]


def shot(minutes: float, current: float | None, **observables: Any) -> Record:
    """Return a record of a scan of the current, or of a reference shot where there is none."""
    own: Record = {"reference": True} if current is None else {"scan": "loss", "swept": ["coil_current"]}
    return {
        "uid": f"shot-{minutes:g}" if current is not None else f"reference-{minutes:g}",
        "machine": "heron",
        "started": (START + timedelta(minutes=minutes)).isoformat(),
        "sequence": "hold",
        "parameters": {"coil_current": {"value": 60.0 if current is None else current, "unit": "A"}},
        "observables": observables,
        **own,
    }


def number(value: float, stderr: float | None = None) -> Record:
    return {"value": value, "unit": "atoms"} | ({} if stderr is None else {"stderr": stderr})


def worked() -> list[Record]:
    """Return references of 100(4) and 140(2), 20 minutes apart, and readings of 60(3) and 70(5) between them."""
    return [
        shot(0, None, atom_number=number(100, 4)),
        shot(5, 61.0, atom_number=number(60, 3)),
        shot(15, 62.0, atom_number=number(70, 5)),
        shot(20, None, atom_number=number(140, 2)),
    ]


@pytest.fixture
def here(anywhere: str) -> Iterator[Store]:
    with open_store(anywhere) as opened:
        yield opened


def take(store: Store, records: list[Record]) -> None:
    assert not store.take(records).refused


def test_worked_by_hand(here: Store) -> None:
    take(here, worked())
    scan = here.scan("loss")
    table = scan.table(relative_to="reference")
    assert table["atom_number"].tolist() == pytest.approx([60 / 110, 70 / 130])
    common = [60 / 110**2 * hypot(0.75 * 4, 0.25 * 2), 70 / 130**2 * hypot(0.25 * 4, 0.75 * 2)]
    assert table["atom_number_stderr"].tolist() == pytest.approx(
        [hypot(3 / 110, common[0]), hypot(5 / 130, common[1])]
    )
    assert table["atom_number_reference"].tolist() == pytest.approx([110, 130])
    assert table["atom_number_reference_stderr"].tolist() == pytest.approx([hypot(3, 0.5), hypot(1, 1.5)])
    assert table.attrs["units"] == {"coil_current": "A", "atom_number": "", "atom_number_reference": "atoms"}
    assert table.attrs["relative"] == {
        "relative_to": "reference",
        "reference_shots": 2,
        "reference_sequence": "hold",
        "reference_within_s": 1800.0,
        "reference_distance_s": 300.0,
    }
    assert scan.table()["atom_number"].tolist() == [60, 70]


def test_the_dataset_says_relative_to_what(here: Store, tmp_path: Path) -> None:
    take(here, worked())
    dataset = here.scan("loss").dataset(relative_to="reference")
    assert dataset["atom_number"].sel(coil_current=61).item() == pytest.approx(60 / 110)
    assert dataset["atom_number"].attrs == {
        "long_name": "atom_number, relative to reference shots",
        "ancillary_variables": "atom_number_stderr",
    }
    assert dataset["atom_number_reference"].attrs["units"] == "atoms"
    assert dataset.attrs["reference_shots"] == 2
    assert dataset.attrs["relative_to"] == "reference"
    write_netcdf(dataset, tmp_path / "a.nc")
    xr.testing.assert_identical(read_netcdf(tmp_path / "a.nc"), dataset)


def test_each_cloud_has_its_own_level(store: Store) -> None:
    clouds = "atom_number[up]", "atom_number[down]"
    take(store, [
        shot(0, None, **dict(zip(clouds, (number(100, 1), number(10, 1)), strict=True))),
        shot(1, 61.0, **dict(zip(clouds, (number(50, 1), number(20, 1)), strict=True))),
    ])  # fmt: skip
    dataset = store.scan("loss").dataset(relative_to="reference").squeeze("coil_current")
    assert dataset["atom_number"].sel(cloud="up").item() == 0.5
    assert dataset["atom_number"].sel(cloud="down").item() == 2.0
    assert dataset["atom_number_reference"].sel(cloud="down").item() == 10.0
    assert "atom_number_reference[up]" in store.scan("loss").table(relative_to="reference")


def test_clouds_that_reference_shots_lack_are_answered_with_what_they_have(store: Store) -> None:
    up = {"atom_number[up]": number(50, 1), "atom_number": number(80, 1), "width": number(2, 1)}
    take(store, [shot(0, None, width=number(1, 1), atom_number=number(100, 1)), shot(1, 61.0, **up)])
    scan = store.scan("loss")
    with pytest.raises(
        NoReference, match=r"atom_number\[up\] .* they have atom_number: .* as in -o atom_number "
    ):
        scan.table(relative_to="reference")
    assert scan.table(relative_to="reference", observables=["atom_number"])["atom_number"].item() == 0.8


def test_an_observable_called_like_a_level_keeps_its_name(store: Store) -> None:
    both = {"atom_number": number(50, 1), "atom_number_reference": number(7, 1)}
    take(store, [shot(0, None, **both), shot(1, 61.0, **both)])
    table = store.scan("loss").table(relative_to="reference")
    assert table["atom_number_reference"].tolist() == [1.0]
    assert table["atom_number_reference_"].tolist() == [50.0]
    assert table["atom_number_reference_reference"].tolist() == [7.0]


def test_shots_set_aside_neither_count_nor_stand_in_the_way(here: Store) -> None:
    take(here, [*worked(), shot(90, 63.0, atom_number=number(80, 3))])
    with pytest.raises(NoReference, match="1 of 3 shots"):
        here.scan("loss").table(relative_to="reference")
    here.set_aside(["shot-90"], "too late")
    here.set_aside(["reference-20"], "shutter stuck")
    assert here.scan("loss").table(relative_to="reference")["atom_number"].tolist() == [0.6, 0.7]
    everything = here.scan("loss").table(set_aside=True, relative_to="reference")
    assert everything["atom_number"].tolist() == pytest.approx([0.6, 0.7, np.nan], nan_ok=True)


def test_a_shot_without_a_value_needs_no_reference(store: Store) -> None:
    take(store, [*worked(), shot(90, 63.0, atom_number=None)])
    assert np.isnan(store.scan("loss").table(relative_to="reference")["atom_number"].iloc[2])


def test_too_far(here: Store) -> None:
    take(
        here,
        [*worked(), shot(90, 63.0, atom_number=number(80, 3)), shot(160, 64.0, atom_number=number(80, 3))],
    )
    with pytest.raises(NoReference) as caught:
        here.scan("loss").table(relative_to="reference")
    assert str(caught.value) == (
        "scan loss#1: atom_number relative to reference shots: 2 of 4 shots have no reference shot within 30 min, the "
        "worst has its nearest 2.3 h away; if that is near enough, say so: reference_within='2.4 h' "
        "(--reference-within)"
    )
    assert here.scan("loss").table(relative_to="reference", reference_within="2.4 h")["atom_number"].iloc[
        3
    ] == pytest.approx(80 / 140)
    assert (
        len(here.scan("loss").dataset(relative_to="reference", reference_within=8400.0)["coil_current"]) == 4
    )


def test_none_at_all(store: Store) -> None:
    take(store, [record for record in worked() if not record.get("reference")])
    with pytest.raises(
        NoReference, match="found no reference shot of its machine that has it, wanted some within 30"
    ):
        store.scan("loss").table(relative_to="reference")


def test_an_observable_that_no_reference_shot_has_can_be_left_out(store: Store) -> None:
    records = worked()
    records[1]["observables"]["width"] = 3.0
    take(store, records)
    with pytest.raises(NoReference, match="width relative to reference shots: found no reference shot"):
        store.scan("loss").table(relative_to="reference")
    table = store.scan("loss").table(observables=["atom_number"], relative_to="reference")
    assert "width" not in table
    assert len(table) == 2
    with pytest.raises(NotFound, match="no observable 'atoms'; it has atom_number"):
        store.scan("loss").table(observables=["atoms"])
    assert list(store.scan("loss").dataset(observables=["width"]).data_vars)[-2:] == ["width", "width_stderr"]


@pytest.mark.parametrize("odd", [0.0, -3.0])
def test_readings_through_zero(store: Store, odd: float) -> None:
    take(store, [*worked(), shot(10, None, atom_number=number(odd, 1))])
    with pytest.raises(
        NoReference, match=rf"reference shot reference-10 reads {odd:g} where others read 120: .*aside"
    ):
        store.scan("loss").table(relative_to="reference")
    store.set_aside(["reference-10"], "no atoms")
    store.scan("loss").table(relative_to="reference")


def test_the_others_are_those_of_the_other_sign(store: Store) -> None:
    records = [
        shot(0, None, atom_number=number(100, 1)),
        shot(10, None, atom_number=number(-5, 1)),
        shot(5, 61.0, atom_number=number(50, 1)),
    ]
    take(store, records)
    with pytest.raises(NoReference, match=r"reference shot reference-10 reads -5 where others read 100: "):
        store.scan("loss").table(relative_to="reference")


def test_what_may_be_zero_is_no_divisor(store: Store) -> None:
    take(store, [shot(0, None, position=number(5, 2)), shot(1, 61.0, position=number(3, 1))])
    with pytest.raises(
        NoReference, match="say 5 with a standard uncertainty of 2, wanted 3 times as much at least"
    ):
        store.scan("loss").table(relative_to="reference")


def test_degrees_have_no_ratio(store: Store) -> None:
    warm = {"value": 22.0, "unit": "degC"}
    take(store, [shot(0, None, room=warm), shot(1, 61.0, room=warm)])
    with pytest.raises(NoReference, match="it is in degC, which does not count from zero"):
        store.scan("loss").table(relative_to="reference")


def test_reference_shots_of_another_sequence(here: Store) -> None:
    other = [record | {"sequence": "watch"} if record.get("reference") else record for record in worked()]
    take(here, other)
    table = here.scan("loss").table(relative_to="reference")
    assert table["atom_number"].tolist() == pytest.approx([60 / 110, 70 / 130])
    assert table.attrs["relative"]["reference_sequence"] == "watch"
    third = shot(7, None, atom_number=number(500, 1)) | {"sequence": "third"}
    take(here, [third])
    with pytest.raises(NoReference, match="several sequences within 30 min, watch, third, but none of hold"):
        here.scan("loss").table(relative_to="reference")
    take(here, [shot(8, None, atom_number=number(100, 1))])  # its own come first
    table = here.scan("loss").table(relative_to="reference")
    assert table["atom_number"].tolist() == [0.6, 0.7]
    assert table.attrs["relative"]["reference_sequence"] == "hold"


def test_other_machines_do_not_count(store: Store) -> None:
    records = worked()
    records[3] |= {"machine": "osprey"}
    take(store, records)
    assert store.scan("loss").table(relative_to="reference")["atom_number"].tolist() == [0.6, 0.7]


def test_what_comes_later_than_the_limit_changes_nothing(store: Store) -> None:
    take(store, worked())
    before = store.scan("loss").table(relative_to="reference")
    take(store, [shot(50, None, atom_number=number(900, 1)), shot(-31, None, atom_number=number(900, 1))])
    assert store.scan("loss").table(relative_to="reference").equals(before)


def test_wrong_arguments(store: Store) -> None:
    take(store, worked())
    with pytest.raises(ChoiceNeeded, match="relative_to: found 'references', wanted 'reference' or None"):
        store.scan("loss").table(relative_to="references")
    for wrong in ("soon", 0, -1, "3 A", float("nan"), float("inf")):
        with pytest.raises(ChoiceNeeded, match=r"reference_within: found .* wanted a time such as '30 min'"):
            store.scan("loss").table(relative_to="reference", reference_within=wrong)


def test_times_are_written_as_they_are_read() -> None:
    for seconds, text in ((45.0, "45 s"), (1800.0, "30 min"), (7560.0, "2.1 h"), (3e5, "3.5 d")):
        assert span_text(seconds) == text
    assert read_within(span_text(7201.0, up=True)) >= 7201.0


def drifting(seed: int) -> tuple[list[Record], list[float]]:
    """Return an evening of a machine that loses a third of its atoms, and the true ratio at each point."""
    rng = np.random.default_rng(seed)
    records, truths = [], []
    for place in range(90):
        machine = 1e5 * (1 - 0.35 * place / 90 + 0.03 * np.sin(place / 14))
        if place % 8 == 0:
            seen = machine * (1 + 0.04 * rng.normal())
            records.append(shot(place / 2, None, atom_number=number(seen, 0.01 * seen)))
            continue
        current = 58 + 0.1 * place
        truth = 1 - 0.6 / (1 + ((current - 62) / 0.8) ** 2)
        noise = 0.03 * truth * machine
        records.append(
            shot(place / 2, current, atom_number=number(truth * machine + noise * rng.normal(), noise))
        )
        truths.append(truth)
    return records, truths


def test_a_drifting_machine_is_normalised_within_uncertainty(tmp_path: Path) -> None:
    pulls, raw = [], []
    for seed in range(12):
        records, truths = drifting(seed)
        with open_store(tmp_path / f"{seed}.sqlite", create=True) as store:
            take(store, records)
            table = store.scan("loss").table(relative_to="reference")
            pulls += ((table["atom_number"] - truths) / table["atom_number_stderr"]).tolist()
            raw += (store.scan("loss").table()["atom_number"] / 1e5 - truths).tolist()
    print(f"pull width {np.std(pulls):.3f}, inside 95 {np.mean(np.abs(pulls) < 1.96):.3f} of {len(pulls)}")
    assert 0.85 < np.std(pulls) < 1.12
    assert 0.92 < np.mean(np.abs(pulls) < 1.96) < 0.985
    assert np.std(raw) > 0.08  # without the reference shots it is far off
