"""What a correction did, or would do: on a screen, in a pipe, and as JSON."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

from nightfold_cli.keptfits import named_fits, relative_lines, slice_lines
from nightfold_cli.layout import Column
from nightfold_cli.render import Screen
from nightfold_cli.scantext import counted
from nightfold_cli.settings import setting

if TYPE_CHECKING:
    from nightfold.fits.keptfit import KeptFit
    from nightfold.ledger.correcting import Corrected
    from nightfold.store import Store

_FEW = 3


def show_correction(
    screen: Screen, store: Store, done: Corrected, uids: Sequence[str], *, dry: bool = False
) -> None:
    """Say how many shots were changed, by which correction, and which fits are stale now; or what would change."""
    uids = list(dict.fromkeys(uids))
    stale = [] if dry else named_fits(store, [fit for fit in store.fits(shots=uids) if fit.stale])
    if screen.json:
        answer: dict[str, Any] = {
            "corrected": int(done), "number": done.number, "dry_run": dry, "shots": uids,
            "changes": [_change(change) for change in done.changes], "stale": [_entry(fit) for fit in stale],
        }  # fmt: skip
        screen.answer(answer)
        return
    unchanged = len(uids) - done
    if dry:
        rows = [
            [change.uid, change.parameter, setting(change.old), setting(change.new), change.unit]
            for change in done.changes
        ]
        heads = (Column("uid"), Column("parameter"), Column("old", right=True), Column("new", right=True))
        screen.table([*heads, Column("unit")], rows, empty="nothing would change")
    verb = "would be corrected" if dry else "corrected"
    already = f"; {unchanged} {'have' if dry else 'had'} it so already" if unchanged else ""
    screen.text(f"{counted(int(done), 'shot')} {verb}{already}")
    if done.number is not None:
        (screen.note if screen.terminal else screen.say)(
            f"correction {done.number}; 'amend --undo {done.number}' takes it back"
        )
    if stale:
        _say_stale(screen, stale)


def _say_stale(screen: Screen, stale: Sequence[KeptFit]) -> None:
    """List the fits that are stale now, and what brings them up to date."""
    screen.heading(f"{counted(len(stale), 'kept fit')} stale now")
    for fit in stale:
        where = "".join(f", {line}" for line in (*relative_lines(fit), *slice_lines(fit)))
        screen.item(fit.scan_key, f"{fit.model}, {fit.observable} along {fit.along}{where}")
    keys = list(dict.fromkeys(fit.scan_key for fit in stale))
    commands = [f"nightfold fit --again {key}".rstrip() for key in (keys if len(keys) <= _FEW else [""])]
    screen.gap()
    screen.note("'fit --again' brings them up to date:")
    for command in commands:
        if screen.terminal:
            screen.command(command)
        else:
            screen.say(f"go on with: {command}")


def _change(change: Any) -> dict[str, Any]:
    """Return one changed setting for JSON."""
    return {name: getattr(change, name) for name in ("uid", "parameter", "old", "new")} | {
        "unit": change.unit or None
    }


def _entry(fit: KeptFit) -> dict[str, Any]:
    """Return a stale fit for JSON."""
    return {name: getattr(fit, name) for name in ("id", "model", "observable", "along", "slice")} | {
        "scan": fit.scan_key
    }
