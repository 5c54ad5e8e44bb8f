"""Putting right what went otherwise than planned in the demo, each as its user would, and what fits find then."""

from __future__ import annotations

import sys
from collections import defaultdict
from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

from nightfold_cli.demo.truths import MACHINE, Found, find_truth
from nightfold_cli.progress import Progress

if TYPE_CHECKING:
    from nightfold.simulator import Campaign, Mishap, Truth
    from nightfold.store import Store

BY = "demo"
HAPPENED: Mapping[str, str] = {
    "resumed": "aborted, and resumed after another scan",
    "clouds": "two spin states in one picture",
    "reanalysed": "dense clouds analysed as thin ones",
    "misrecorded": "coil supply in another range than recorded",
    "mislabelled": "label mistyped halfway",
    "drifting": "a fifth of the atoms lost during the scan",
    "misnamed": "machine named wrongly until halfway",
    "adaptive": "each point chosen after the last",
}

TO_TRY: Mapping[str, str] = {
    "clouds": "fit rf-transfer gaussian -o polarisation --along detuning",
    "mislabelled": "scan loss-check",
    "drifting": "sequence hold-in-trap",
}
"""Commands that show more of it."""


@dataclass(frozen=True, slots=True)
class Mended:
    """A mishap and what was done about it.

    Attributes
    ----------
    mishap : Mishap
    done : str
    without : tuple of Found or None
        What fits find if nothing is done; None where that makes no sense.
    found : tuple of Found
        What they find now, one a truth.
    """

    mishap: Mishap
    done: str
    without: tuple[Found | None, ...]
    found: tuple[Found, ...]


def mend_all(store: Store, campaign: Campaign) -> list[Mended]:
    """Put right one mishap after the other, in the order in which they happened."""
    mended = []
    with Progress("putting right", len(campaign.mishaps), sys.stderr) as progress:
        for count, mishap in enumerate(campaign.mishaps):
            progress(count)
            without = tuple(_without(store, mishap, truth) for truth in mishap.truths)
            done = _WAYS[mishap.kind](store, mishap, campaign)
            found = tuple(find_truth(store, truth) for truth in mishap.truths)
            mended.append(Mended(mishap, done, without, found))
    return mended


def _without(store: Store, mishap: Mishap, truth: Truth) -> Found | None:
    """Return what a fit finds as long as nothing has been put right."""
    if mishap.kind in ("resumed", "adaptive") or truth.unit == "":
        return None
    alone = replace(truth, relative_to=None)
    if mishap.kind == "clouds":
        alone = replace(alone, observable="atom_number[up]")
    # the fit of the first analysis is kept, so that the later one finds it stale
    return find_truth(store, alone, keep=mishap.kind == "reanalysed")


def _resumed(store: Store, mishap: Mishap, campaign: Campaign) -> str:
    return f"nothing: one scan of {_count(store, mishap)} shots"


def _adaptive(store: Store, mishap: Mishap, campaign: Campaign) -> str:
    return f"nothing: {_count(store, mishap)} shots, {_count(store, mishap)} points"


def _clouds(store: Store, mishap: Mishap, campaign: Campaign) -> str:
    return "polarisation along detuning"


def _reanalysed(store: Store, mishap: Mishap, campaign: Campaign) -> str:
    amended = sum(store.take_file(path).amended for path in campaign.reanalyses)
    again = sum(item.after is not None for item in store.refit())
    return f"{amended} shots amended, {again} fit done again"


def _misrecorded(store: Store, mishap: Mishap, campaign: Campaign) -> str:
    """Correct a setting shot by shot: what was recorded, times the factor that was forgotten."""
    name = str(mishap.parameter)
    scan = store.scan(mishap.scans[0])
    shots: dict[float, list[str]] = defaultdict(list)
    table = store.shots([name], scan=scan.id, set_aside=True)
    for uid, value in zip(table["uid"], table[name], strict=True):
        shots[float(value)].append(uid)
    unit = table.attrs["units"][name]
    reason = f"the supply's range was set wrongly: recorded {mishap.factor:.4g} of it"
    changed = 0
    for value, uids in shots.items():
        right = {name: {"value": round(value / mishap.factor, 3), "unit": unit}}
        changed += store.correct(uids, right, reason, by=BY)
    return f"{name} corrected in {changed} shots"


def _mislabelled(store: Store, mishap: Mishap, campaign: Campaign) -> str:
    store.join_scans(mishap.scans, reason="a label mistyped", by=BY)
    first, other = mishap.scans
    return f"{other} joined to {first}"


def _drifting(store: Store, mishap: Mishap, campaign: Campaign) -> str:
    return "relative to the reference shots"


def _misnamed(store: Store, mishap: Mishap, campaign: Campaign) -> str:
    store.merge_machines(str(mishap.machine), MACHINE, reason="the control program was set up anew", by=BY)
    return f"{mishap.machine} merged into {MACHINE}: {_count(store, mishap)} shots in one scan"


_WAYS: Mapping[str, Callable[[Store, Mishap, Campaign], str]] = {
    "resumed": _resumed,
    "adaptive": _adaptive,
    "clouds": _clouds,
    "reanalysed": _reanalysed,
    "misrecorded": _misrecorded,
    "mislabelled": _mislabelled,
    "drifting": _drifting,
    "misnamed": _misnamed,
}


def _count(store: Store, mishap: Mishap) -> int:
    """Return how many shots the scan of a mishap has."""
    scan = store.scan(mishap.scans[0])
    return scan.shots + scan.set_aside
