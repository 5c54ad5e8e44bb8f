"""What the demo found, as JSON."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from nightfold_cli.demo.mending import Mended
from nightfold_cli.demo.outcome import Outcome, same
from nightfold_cli.demo.truths import Found
from nightfold_cli.demo.watching import Seen

if TYPE_CHECKING:
    from nightfold.simulator import Campaign
    from nightfold.store import Store


def entry(store: Store, outcome: Outcome) -> dict[str, Any]:
    """Return everything."""
    campaign = outcome.campaign
    return {
        "store": store.where,
        "shots": campaign.shots,
        "new": outcome.intake.new,
        "amended": outcome.intake.amended,
        "refused": len(outcome.intake.refused),
        "scans": len(store.scans()),
        "truths": [_truth(item) for item in outcome.found],
        "changes": _changes(campaign),
        "edits": [
            {
                "truth": {"at": edit.at, "parameter": edit.parameter, "old": edit.old, "new": edit.new},
                "found": next((one for one in outcome.edits if same(edit, one)), None),
            }
            for edit in campaign.edits
        ],
        "mishaps": [_mishap(item) for item in outcome.mended],
        **_seen(outcome.seen),
    }


def _truth(item: Found) -> dict[str, Any]:
    """Return a truth and what was found."""
    estimate = item.estimate
    return {
        "what": item.truth.what,
        "truth": item.truth.value,
        "value": estimate.value if estimate else None,
        "stderr": estimate.stderr if estimate else None,
        "interval95": list(item.interval95) if item.interval95 else None,
        "unit": item.truth.unit,
        "scan": item.scan,
        "trusted": item.trusted,
        "problem": item.problem or None,
    }


def _changes(campaign: Campaign) -> list[dict[str, Any]]:
    return [
        {
            "truth": {
                "kind": change.kind,
                "at": change.at,
                "observable": change.observable,
                "size": change.size,
                "cause": change.cause,
            },
            "found": None,
        }
        for change in campaign.changes
    ]


def _mishap(item: Mended) -> dict[str, Any]:
    """Return a mishap, what was done, and what was found without and with that."""
    return {
        "kind": item.mishap.kind,
        "scans": list(item.mishap.scans),
        "shots": item.mishap.shots,
        "done": item.done,
        "truths": [
            _truth(found) | {"without": _truth(without) if without else None}
            for found, without in zip(item.found, item.without, strict=True)
        ],
    }


def _seen(seen: Seen) -> dict[str, Any]:
    """Return what the store tells beside fits."""
    return {
        "readings": seen.readings,
        "notes": seen.notes,
        "sensors": [
            {
                "truth": {"at": item.truth.at, "sensor": item.truth.sensor, "step": item.truth.step},
                "value": item.step,
                "stderr": item.stderr,
            }
            for item in seen.warmings
        ],
        "versions": [
            {
                "truth": {"at": item.truth.at, "sequence": item.truth.sequence, "step": item.truth.step},
                "versions": item.versions,
                "found": item.found,
            }
            for item in seen.versions
        ],
    }
