"""Sensors beside shots and in bins, against a look at every reading."""

from __future__ import annotations

import math
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

from nightfold.errors import ChoiceNeeded, NotFound
from nightfold.opening import open_store
from nightfold.store import Store

START = datetime(2026, 10, 5, 18, 0, tzinfo=UTC)


def moment(seconds: float) -> str:
    return (START + timedelta(seconds=seconds)).isoformat()


def shot(seconds: float, k: int = 0, **more: Any) -> dict[str, Any]:
    return {
        "machine": "heron", "started": moment(seconds), "sequence": "hold",
        "parameters": {"coil_current": {"value": 60 + k % 5, "unit": "A"}}, "observables": {"atoms": 1e5 + k},
    } | more  # fmt: skip


def reading(seconds: float, machine: str = "heron", /, **readings: Any) -> dict[str, Any]:
    return {"machine": machine, "at": moment(seconds), "readings": readings}


@pytest.fixture
def filled(anywhere: str) -> Any:
    """Return where a store is with 200 shots 12.5 s apart and a sensor read at odd moments over an hour's bound."""
    rng = np.random.default_rng(5)
    at = np.sort(rng.choice(3_000_000, 900, replace=False)) / 1000 + 1800
    at = at[(at < 2500) | (at > 3200)]
    values = 20 + rng.normal(size=len(at))
    with open_store(anywhere) as store:
        store.take([shot(1700 + 12.5 * k, k) for k in range(200)])
        store.take_sensors(
            [
                reading(float(t), room={"value": float(v), "unit": "degC"})
                for t, v in zip(at, values, strict=True)
            ]
        )
    return anywhere, at, values


def test_nearest_against_every_reading(filled: Any) -> None:
    where, at, values = filled
    with open_store(where) as store:
        table = store.shots(["coil_current"], sensors=["room"])
        assert table.attrs["units"] == {"coil_current": "A", "room": "degC"}
        some = store.shots(sensors="room", limit=7)
        assert some["room"].tolist() == table["room"].tolist()[-7:]
    wanted = []
    for started in (table["started"] - START).dt.total_seconds():
        distance = np.abs(at - started)
        wanted.append(values[distance.argmin()] if distance.min() <= 60 else math.nan)
    np.testing.assert_array_equal(table["room"], wanted)
    assert 0 < np.isnan(wanted).sum() < 100
    known = pd.DataFrame({"started": START + pd.to_timedelta(at, unit="s").round("us"), "room": values})
    merged = pd.merge_asof(
        table[["started"]].astype({"started": "datetime64[us, UTC]"}),
        known.astype({"started": "datetime64[us, UTC]"}),
        on="started",
        direction="nearest",
        tolerance=pd.Timedelta("60s"),
    )
    np.testing.assert_array_equal(table["room"], merged["room"])


def test_mean_to_the_next_shot_against_every_reading(filled: Any) -> None:
    where, at, values = filled
    with open_store(where) as store:
        table = store.shots(sensors=["room"], align="mean")
    for started, mean in zip((table["started"] - START).dt.total_seconds(), table["room"], strict=True):
        own = values[(at >= started) & (at < started + 12.5)]
        assert mean == pytest.approx(own.mean() if len(own) else math.nan, rel=1e-12, nan_ok=True)


def test_mean_over_the_steps_of_the_sequence(store: Store) -> None:
    steps = [
        {"name": "load", "duration": {"value": 3, "unit": "s"}},
        {"name": "hold", "duration": {"value": 500, "unit": "ms"}},
    ]
    sequence = {"name": "hold", "steps": steps}
    store.take([shot(20 * k, sequence=sequence) for k in range(3)] + [shot(60), shot(200)])
    store.take_sensors([reading(k, room=float(k)) for k in range(230)])
    table = store.shots(sensors=["room"], align="mean")
    # 3.5 s of steps: 0-3; then to the next shot, but no longer than the usual 20 s
    assert table["room"].tolist() == [1.5, 21.5, 41.5, 69.5, 209.5]
    one = store.shots(sensors=["room"], align="mean", since=moment(60), until=moment(61))
    assert one["room"].tolist() == [69.5]  # whatever else was chosen


def test_the_limit_grows_with_the_interval_of_the_sensor(store: Store) -> None:
    store.take([shot(0), shot(3601), shot(9000 + 3 * 3600)])
    store.take_sensors([reading(600 * k, slow=float(k)) for k in range(10)])
    assert store.shots(sensors=["slow"])["slow"].tolist()[:2] == [0.0, 6.0]
    assert math.isnan(store.shots(sensors=["slow"])["slow"][2])


def test_each_shot_has_the_sensor_of_its_machine(store: Store) -> None:
    store.take([shot(0), shot(1) | {"machine": "osprey"}, shot(2) | {"machine": "kite"}])
    store.take_sensors([reading(0, room=1.0), reading(0, "osprey", room=2.0)])
    found = store.shots(sensors=["room"])["room"].tolist()
    assert found[:2] == [1.0, 2.0]
    assert math.isnan(found[2])
    store.take_sensors([reading(0, "kite", room={"value": 3.0, "unit": "K"})])
    with pytest.raises(ChoiceNeeded, match="sensor 'room': differs in kind or unit"):
        store.shots(sensors=["room"])
    assert store.shots(sensors=["room"], machine="kite")["room"].tolist() == [3.0]


def test_a_scan_with_sensors(store: Store, tmp_path: Path) -> None:
    card = tmp_path / "heron.toml"
    card.write_text(
        'machine = "heron"\n[sensors."room[left]"]\ndescription = "beside the table"\n', encoding="utf-8"
    )
    store.use_card(card)
    store.take([shot(10 * k, k, scan="loss", swept=["coil_current"]) for k in range(20)])
    store.take_sensors(
        [reading(k, **{"room[left]": {"value": float(k), "unit": "degC"}}) for k in range(300)]
    )
    scan = store.scan("loss")
    table = scan.table(sensors=["room[left]"])
    assert table["room[left]"].tolist() == [10.0 * k for k in range(20)]
    assert table.attrs["units"]["room[left]"] == "degC"
    assert "room[left]" not in scan.units
    assert scan.table(sensors="room[left]", align="mean")["room[left]"][0] == 4.5
    dataset = scan.dataset(sensors=["room[left]"])
    assert dataset["room[left]"].dims == ("coil_current", "repeat")
    assert dataset["room[left]"].sel(coil_current=61.0).values.tolist() == [10.0, 60.0, 110.0, 160.0]
    assert dataset["room[left]"].attrs == {"long_name": "beside the table", "units": "degC"}


def test_what_cannot_be_aligned(store: Store) -> None:
    store.take([shot(0, note="x")])
    store.take_sensors([reading(0, room=1.0, started=2.0)])
    assert store.shots(sensors=["started"])["started_"].tolist() == [2.0]
    with pytest.raises(NotFound, match="sensor 'rom': not in this store; it has room"):
        store.shots(sensors=["rom"])
    with pytest.raises(NotFound, match="align 'middle': wanted 'nearest' or 'mean'"):
        store.shots(sensors=["room"], align="middle")
    store.take([shot(100, parameters={"room": 3.0})])
    with pytest.raises(ChoiceNeeded, match="column 'room': two things have this name"):
        store.shots(["room"], sensors=["room"])
    assert math.isnan(store.shots(sensors=["room"])["room"][1])


def test_spans_and_bins(anywhere: str) -> None:
    """Bins of less than an hour from the readings, longer ones from the hours: both against pandas."""
    rng = np.random.default_rng(2)
    seconds = np.arange(0, 40 * 3600, 47)
    values = np.round(rng.normal(size=len(seconds)), 3)
    values[::100] = np.nan
    with open_store(anywhere) as store:
        store.take_sensors([reading(int(s), room=float(v)) for s, v in zip(seconds, values, strict=True)])
        frame = store.sensor("room")
        np.testing.assert_array_equal(frame["value"], values)
        part = store.sensor("room", moment(1000), moment(8000))
        inside = (seconds >= 1000) & (seconds < 8000)
        np.testing.assert_array_equal(part["value"], values[inside])
        spans = [
            (60, None, None),
            (10, None, None),
            (7, moment(1000), moment(8000)),
            (1, None, None),
            (5000, None, None),
        ]
        for bins, since, until in spans:
            binned = store.sensor_bins("room", since, until, bins=bins)
            own = part if since else frame
            width = binned.attrs["width_s"]
            assert bins // 3 < len(binned) <= bins
            assert (binned["at"] - pd.Timestamp(0, tz="UTC")).dt.total_seconds().mod(width).eq(0).all()
            place = ((own["at"] - binned["at"][0]).dt.total_seconds() // width).astype(int)
            groups = own["value"].groupby(place)
            assert binned["readings"].tolist() == groups.size().tolist()
            for column, wanted in (("low", groups.min()), ("mean", groups.mean()), ("high", groups.max())):
                np.testing.assert_allclose(binned[column], wanted, rtol=0, atol=1e-12)
        assert store.sensor_bins("room", "2030-01-01").empty
        assert store.sensor("room", "2030-01-01").empty
        assert store.sensor_bins("room", moment(9000), moment(8000)).empty


def test_bins_of_odd_numbers_and_spans(store: Store) -> None:
    for at in ("1969-12-31T23:00:00Z", "1970-01-01T01:00:00Z"):
        store.take_sensors([{"machine": "heron", "at": at, "readings": {"room": 20.0}}])
    for bins in (0, -1):
        with pytest.raises(ValueError, match=f"bins: found {bins}, wanted at least 1"):
            store.sensor_bins("room", bins=bins)
    assert store.sensor_bins("room", bins=1)["readings"].tolist() == [1, 1]  # bins begin in 1970
    assert store.sensor_bins("room", "1970-01-01", bins=1)["readings"].tolist() == [1]


def test_no_sensors_yet(store: Store) -> None:
    assert store.sensors().empty
    with pytest.raises(NotFound, match="sensor 'room': not in this store; it has none yet"):
        store.sensor("room")
    with pytest.raises(NotFound, match="machine 'heron'"):
        store.sensors("heron")
