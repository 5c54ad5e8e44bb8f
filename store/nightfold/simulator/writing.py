"""A campaign as files: one JSON-lines file a night, and the card beside them."""

from __future__ import annotations

import json
import shutil
from collections import deque
from collections.abc import Callable, Iterable, Iterator
from pathlib import Path
from typing import Any

from nightfold.simulator.evening import Night, run_nights
from nightfold.simulator.machine import CARD
from nightfold.simulator.room import find_warmings, write_readings
from nightfold.simulator.schedule import NIGHTS
from nightfold.simulator.truth import Campaign

SEED = 39
SENSORS, LATER = "sensors.csv", "later"
LATE_SHOTS = 14
"""After so many further shots, about three minutes, stands what the analysis found late."""


def write_campaign(
    folder: Path,
    *,
    seed: int = SEED,
    nights: int = NIGHTS,
    declare_swept: bool | None = None,
    progress: Callable[[int], None] | None = None,
) -> Campaign:
    """Return a campaign written into a folder as ``2026-09-28.jsonl`` and so on, with its card and its truth.

    What a later analysis says of a night stands in ``later/reanalysis-2026-10-07.jsonl``, what the sensors read in
    ``sensors.csv``.

    Parameters
    ----------
    folder : Path
        Made if it is missing; files of the same names are replaced.
    seed : int
        The same seed gives the same bytes.
    nights : int
        How many evenings, five a week; fewer are the beginning of more.
    declare_swept : bool or None
        Whether the records say what is swept: all, none, or (None) some, as a laboratory would.
    progress : callable or None
        Called with the number of nights written so far.

    Raises
    ------
    ValueError
        If `nights` is less than one.
    """
    folder.mkdir(parents=True, exist_ok=True)
    done: list[Night] = []
    files: list[Path] = []
    for night in run_nights(seed, nights, declare_swept):
        files.append(_write(folder / f"{night.night.isoformat()}.jsonl", lines_of(night)))
        done.append(night)
        if progress is not None:
            progress(len(files))
    card = folder / CARD.name
    shutil.copyfile(CARD, card)
    return Campaign(
        files=tuple(files),
        card=card,
        truths=tuple(truth for night in done for truth in night.truths),
        changes=tuple(change for night in done for change in night.changes),
        edits=tuple(edit for night in done for edit in night.edits),
        mishaps=tuple(mishap for night in done for mishap in night.mishaps),
        versions=tuple(version for night in done for version in night.versions),
        warmings=find_warmings(done),
        shots=sum(len(night.shots) for night in done),
        sensors=write_readings(folder / SENSORS, done, seed),
        reanalyses=tuple(_write_reanalyses(folder, done)),
    )


def shot_records(
    *, seed: int = SEED, nights: int = NIGHTS, declare_swept: bool | None = None
) -> Iterator[dict[str, Any]]:
    """Yield the records of a campaign in the order of taking, without files; see `write_campaign`."""
    for night in run_nights(seed, nights, declare_swept):
        yield from lines_of(night)


def lines_of(night: Night) -> Iterator[dict[str, Any]]:
    """Yield the records of a night as they are written: what the analysis finds late comes shots later."""
    waiting: deque[tuple[int, dict[str, Any]]] = deque()
    for number, taken in enumerate(night.shots):
        while waiting and waiting[0][0] <= number:
            yield waiting.popleft()[1]
        yield taken.record
        if taken.late is not None:
            waiting.append((number + LATE_SHOTS, taken.late))
    yield from (late for _, late in waiting)


def _write_reanalyses(folder: Path, nights: Iterable[Night]) -> Iterator[Path]:
    for night in nights:
        again = [taken.again for taken in night.shots if taken.again is not None]
        if again:
            (folder / LATER).mkdir(exist_ok=True)
            yield _write(folder / LATER / f"reanalysis-{night.night.isoformat()}.jsonl", again)


def _write(path: Path, records: Iterable[dict[str, Any]]) -> Path:
    with path.open("w", encoding="utf-8", newline="\n") as file:
        for record in records:
            file.write(json.dumps(record, ensure_ascii=False, separators=(",", ":")) + "\n")
    return path
