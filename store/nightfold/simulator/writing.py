"""A campaign as files: one JSON-lines file a night, and the card beside them."""

from __future__ import annotations

import json
import shutil
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

from nightfold.simulator.evening import Night, run_nights
from nightfold.simulator.machine import CARD
from nightfold.simulator.schedule import NIGHTS
from nightfold.simulator.truth import Campaign, TrueChange, TrueEdit, Truth

SEED = 39


def write_campaign(
    folder: Path,
    *,
    seed: int = SEED,
    nights: int = NIGHTS,
    declare_swept: bool | None = None,
    progress: Callable[[int], None] | None = None,
) -> Campaign:
    """Return a campaign written into a folder as ``2026-09-28.jsonl`` and so on, with its card and its truth.

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
    files: list[Path] = []
    truths: list[Truth] = []
    changes: list[TrueChange] = []
    edits: list[TrueEdit] = []
    shots = 0
    for night in run_nights(seed, nights, declare_swept):
        files.append(_write_night(folder, night))
        truths += night.truths
        changes += night.changes
        edits += night.edits
        shots += len(night.shots)
        if progress is not None:
            progress(len(files))
    card = folder / CARD.name
    shutil.copyfile(CARD, card)
    return Campaign(tuple(files), card, tuple(truths), tuple(changes), tuple(edits), shots)


def shot_records(
    *, seed: int = SEED, nights: int = NIGHTS, declare_swept: bool | None = None
) -> Iterator[dict[str, Any]]:
    """Yield the records of a campaign in the order of taking, without files; see `write_campaign`."""
    for night in run_nights(seed, nights, declare_swept):
        for taken in night.shots:
            yield taken.record


def _write_night(folder: Path, night: Night) -> Path:
    path = folder / f"{night.night.isoformat()}.jsonl"
    with path.open("w", encoding="utf-8", newline="\n") as file:
        for taken in night.shots:
            file.write(json.dumps(taken.record, ensure_ascii=False, separators=(",", ":")) + "\n")
    return path
