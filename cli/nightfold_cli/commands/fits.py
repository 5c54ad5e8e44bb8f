"""``nightfold fits``: the fits that were kept."""

from __future__ import annotations

from argparse import ArgumentParser, Namespace
from typing import TYPE_CHECKING, Any

from nightfold_cli import estimates
from nightfold_cli.arguments import positive, scan_key
from nightfold_cli.concise import short
from nightfold_cli.estimates import value_text
from nightfold_cli.layout import Cell, Column, Row
from nightfold_cli.localtimes import compact, heading
from nightfold_cli.opening import local_times, opened
from nightfold_cli.render import Screen

if TYPE_CHECKING:
    from nightfold.fits.kept import KeptFit

HELP = "list the fits that were kept"
EXAMPLES = ("nightfold fits", "nightfold fits loss-coarse", "nightfold fits --json")
_ON_SCREEN = 20


def add_arguments(parser: ArgumentParser) -> None:
    """Declare the arguments."""
    parser.add_argument("key", metavar="KEY", nargs="?", type=scan_key, help="of this scan only")
    parser.add_argument("--last", metavar="N", type=positive, help=f"the last N (on a terminal {_ON_SCREEN})")
    parser.add_argument("--all", action="store_true", help="all of them, on a terminal too")


def run(args: Namespace) -> int:
    """List the fits, the newest last."""
    screen = Screen.here(args.json)
    with opened(args, screen) as store:
        kept = sorted(store.fits(args.key), key=lambda fit: (fit.at, fit.id))
        times = local_times(store)
    last = args.last or (_ON_SCREEN if screen.terminal and not args.all else len(kept))
    listed = kept[-last:] if last else []
    if screen.json:
        screen.answer({"fits": [_entry(fit) for fit in listed]})
        return 0
    moments = [times.local(fit.at) for fit in listed]
    columns = [
        Column("scan", wraps=True),
        Column("model", wraps=True),
        Column("observable", wraps=True, spare=2),
        Column("estimates"),
        Column("trust"),
        Column(heading(moments, "kept"), spare=1, plain_name="kept"),
        Column("shots", right=True, spare=3),
    ]
    rows: list[Row] = [
        [
            fit.scan_key + _slice(fit),
            fit.model,
            fit.observable,
            _estimates(fit),
            Cell(*_trust(fit)),
            Cell(when, at.isoformat(timespec="seconds")),
            str(fit.shots),
        ]
        for fit, when, at in zip(listed, compact(moments), moments, strict=True)
    ]
    screen.table(
        columns, rows, empty="no fits yet; 'nightfold fit KEY MODEL -o OBSERVABLE' makes one", spaced=True
    )
    if len(kept) > len(listed):
        screen.note(f"{len(kept) - len(listed)} earlier ones not shown; --all shows them")
    return 0


def _estimates(fit: KeptFit) -> Cell:
    """Return the estimates, one a line on a screen."""
    texts = [
        f"{name} {value_text(estimate, fixed=estimate.fixed)} {estimate.unit}".rstrip()
        for name, estimate in fit.estimates.items()
    ]
    return Cell("\n".join(texts), "; ".join(texts))


def _trust(fit: KeptFit) -> tuple[str, str]:
    """Return whether to trust a fit, for a screen and for a pipe."""
    codes = [warning.code for warning in fit.warnings if not warning.advisory]
    words = ["yes"] if fit.trusted else ["NO", *codes]
    if fit.stale:
        words.append("stale")
    return "\n".join(words), ", ".join(words)


def _slice(fit: KeptFit) -> str:
    """Return where a slice was taken: `` at hold_time 240``."""
    where = ", ".join(f"{name} {_value(value)}" for name, value in (fit.slice or {}).items())
    return f" at {where}" if where else ""


def _value(value: Any) -> str:
    """Return a setting of a slice."""
    return (
        short(float(value)) if isinstance(value, int | float) and not isinstance(value, bool) else str(value)
    )


def _entry(fit: KeptFit) -> dict[str, Any]:
    """Return a fit for JSON."""
    return {
        "id": fit.id,
        "at": fit.at,
        "scan": fit.scan_key,
        "model": fit.model,
        "background": fit.background,
        "observable": fit.observable,
        "along": fit.along,
        "slice": fit.slice or {},
        "estimates": {name: estimates.entry(estimate) for name, estimate in fit.estimates.items()},
        "trusted": fit.trusted,
        "warnings": [estimates.warning_entry(warning) for warning in fit.warnings],
        "shots": fit.shots,
        "set_aside": fit.set_aside,
        "settings": fit.settings,
        "stale": fit.stale,
        "version": fit.version,
    }
