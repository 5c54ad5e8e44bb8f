"""All that the demo found, in one piece."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from nightfold_cli.demo.mending import Mended
from nightfold_cli.demo.truths import Found
from nightfold_cli.demo.watching import Seen
from nightfold_cli.settings import setting

if TYPE_CHECKING:
    from nightfold.ledger.outcome import Intake
    from nightfold.simulator import Campaign, TrueEdit


@dataclass(frozen=True, slots=True)
class Outcome:
    """What was played, taken and found; `edits` are rows of the edit history."""

    campaign: Campaign
    intake: Intake
    found: Sequence[Found]
    mended: Sequence[Mended]
    seen: Seen
    edits: Sequence[dict[str, Any]]


def same(true: TrueEdit, found: dict[str, Any]) -> bool:
    """Return whether a found edit is the one that was made."""
    return bool(found["parameter"] == true.parameter and setting(found["new"]) == setting(true.new))
