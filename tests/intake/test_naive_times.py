"""Times without an offset: read in the machine's zone if the card says so, never guessed.

Clock changes of Vienna in 2026: 29 March, 02:00 to 03:00, and 25 October, 03:00 to 02:00 (IANA time zone database).
"""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path

import pytest

from nightfold.errors import RecordError
from nightfold.intake.csvfile import CsvColumns
from nightfold.opening import open_store
from nightfold.store import Store

UseCard = Callable[[Store, bool], None]
TIMES = {
    "2026-10-24T23:30:00": "2026-10-24T21:30:00+00:00",  # summer time
    "2026-10-25T01:59:59.999999": "2026-10-24T23:59:59.999999+00:00",
    "2026-10-25T02:00:00": "show this hour twice",
    "2026-10-25T02:59:59.999999": "show this hour twice",
    "2026-10-25T02:30:00+02:00": "2026-10-25T00:30:00+00:00",  # stated: it is the first of the two
    "2026-10-25T02:30:00+01:00": "2026-10-25T01:30:00+00:00",
    "2026-10-25T03:00:00": "2026-10-25T02:00:00+00:00",  # winter time
    "2026-03-29T01:59:59": "2026-03-29T00:59:59+00:00",
    "2026-03-29T02:00:00": "leave this hour out",
    "2026-03-29T02:59:59": "leave this hour out",
    "2026-03-29T03:00:00": "2026-03-29T01:00:00+00:00",
    "2026-07-01T12:00:00-05:00": "2026-07-01T17:00:00+00:00",  # from a control computer of another zone
    "2026-07-01T12:00:00Z": "2026-07-01T12:00:00+00:00",
}
WANTED = sorted(found for found in TIMES.values() if found.endswith("+00:00"))
NAIVE = [time for time in TIMES if "+" not in time[10:] and "-" not in time[10:] and not time.endswith("Z")]


@pytest.fixture
def use(tmp_path: Path) -> UseCard:
    """Return a function that brings a card into force, with or without naive times."""

    def use_card(store: Store, naive: bool) -> None:
        path = tmp_path / "heron.toml"
        path.write_text(f'machine = "heron"\nzone = "Europe/Vienna"\nnaive_times = {str(naive).lower()}\n')
        store.use_card(path)

    return use_card


def json_lines(folder: Path) -> Path:
    path = folder / "shots.jsonl"
    records = (
        {"machine": "heron", "sequence": "s", "started": time, "parameters": {"a": k}}
        for k, time in enumerate(TIMES)
    )
    path.write_text("".join(json.dumps(record) + "\n" for record in records))
    return path


def table(folder: Path) -> Path:
    path = folder / "shots.csv"
    rows = (f"s,{time.replace('T', ' ')},{k}\n" for k, time in enumerate(TIMES))
    path.write_text("sequence,started,a\n" + "".join(rows))
    return path


def started(store: Store) -> list[str]:
    return sorted(at.isoformat() for at in store.shots()["started"])


@pytest.mark.parametrize("write", [json_lines, table])
def test_in_the_zone_of_the_card(
    anywhere: str, use: UseCard, tmp_path: Path, write: Callable[[Path], Path]
) -> None:
    path = write(tmp_path)
    columns = CsvColumns(machine="heron", parameters=("a",)) if path.suffix == ".csv" else None
    with open_store(anywhere) as store:
        use(store, True)
        outcome = store.take_file(path, columns=columns)
        assert started(store) == WANTED
        lines = {item.line - (path.suffix == ".csv"): item.reason for item in outcome.refused}
        for number, (time, found) in enumerate(TIMES.items(), 1):
            assert (number in lines) == (not found.endswith("+00:00")), time
            if number in lines:
                assert found in lines[number], time
                assert "started: found" in lines[number]
        again = store.take_file(path, columns=columns)
        assert (again.new, again.known) == (0, len(WANTED))


@pytest.mark.parametrize("write", [json_lines, table])
def test_refused_without_the_card(
    store: Store, use: UseCard, tmp_path: Path, write: Callable[[Path], Path]
) -> None:
    path = write(tmp_path)
    use(store, False)
    columns = CsvColumns(machine="heron", parameters=("a",)) if path.suffix == ".csv" else None
    outcome = store.take_file(path, columns=columns)
    assert len(outcome.refused) == len(NAIVE)
    assert all("wanted an ISO 8601 time with an offset" in item.reason for item in outcome.refused)
    assert len(started(store)) == len(TIMES) - len(NAIVE)


def test_what_was_refused_comes_in_when_the_card_allows_it(
    store: Store, use: UseCard, tmp_path: Path
) -> None:
    path = json_lines(tmp_path)
    use(store, False)
    before = store.take_file(path)
    use(store, True)
    after = store.take_file(path)
    assert (after.new, after.known) == (len(WANTED) - before.new, before.new)
    assert started(store) == WANTED


def test_rows_without_times(store: Store, use: UseCard, tmp_path: Path) -> None:
    path = tmp_path / "decay.csv"
    path.write_text("a\n1\n2\n3\n")

    def columns(first: str) -> CsvColumns:
        return CsvColumns(machine="heron", sequence="s", parameters=("a",), started_at=first, cycle_s=1800)

    use(store, False)
    with pytest.raises(RecordError, match="without an offset, wanted an ISO 8601 time with an offset"):
        store.take_file(path, columns=columns("2026-10-25T01:00:00"))
    use(store, True)
    with pytest.raises(RecordError, match="the clocks of Europe/Vienna show this hour twice"):
        store.take_file(path, columns=columns("2026-10-25T02:00:00"))
    store.take_file(
        path, columns=columns("2026-10-25T01:30:00")
    )  # on through the change of clocks by real time
    assert started(store) == [
        f"2026-10-{when}+00:00" for when in ("24T23:30:00", "25T00:00:00", "25T00:30:00")
    ]
