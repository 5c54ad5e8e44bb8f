"""``nightfold fits``: the fits that were kept."""

from __future__ import annotations

from argparse import ArgumentParser, Namespace
from collections import Counter
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING

from nightfold_cli import estimates
from nightfold_cli.arguments import add_last, say_earlier, the_last
from nightfold_cli.estimates import unit_text, value_text
from nightfold_cli.keptfits import kept_entry, named_fits, relative_lines, slice_lines
from nightfold_cli.layout import Cell, Column, Row
from nightfold_cli.localtimes import LocalTimes, compact, heading
from nightfold_cli.naming import named_scan
from nightfold_cli.notetext import first_words, notes_of_fits
from nightfold_cli.opening import local_times, opened
from nightfold_cli.printable import wrap
from nightfold_cli.render import Screen
from nightfold_cli.settings import setting

if TYPE_CHECKING:
    from nightfold.fits.keptfit import KeptFit
    from nightfold.scans.scan import Scan
    from nightfold.store import Store

HELP = "list the fits that were kept"
EXAMPLES = ("nightfold fits", "nightfold fits loss-coarse", "nightfold fits --json")
_ON_SCREEN = 20
_NOTE_WIDTH = 24
_EMPTY = "no fits yet; 'nightfold fit KEY MODEL -o OBSERVABLE' makes one"


def add_arguments(parser: ArgumentParser) -> None:
    """Declare the arguments."""
    parser.add_argument("key", metavar="KEY", nargs="?", help="of this scan only")
    add_last(parser, _ON_SCREEN)


def run(args: Namespace) -> int:
    """List the fits, the newest last."""
    screen = Screen.here(args.json)
    with opened(args, screen) as store:
        scan = None if args.key is None else named_scan(store, args.key, screen)
        kept = sorted(store.fits(scan.id if scan else None), key=lambda fit: (fit.at, fit.id))
        kept = named_fits(store, kept)
        empty = _EMPTY if kept or scan is None else _none_of(store, scan)
        times = local_times(store)
        listed = the_last(args, screen, kept)
        notes = notes_of_fits(store, [fit.id for fit in listed])
    if screen.json:
        screen.answer({"fits": [{**kept_entry(fit), "notes": notes.get(fit.id, [])} for fit in listed]})
        return 0
    if not screen.terminal:
        _tabulate(screen, listed, times, notes, empty)
        return 0
    _draw(screen, listed, times, notes, empty)
    if any(fit.stale for fit in listed):
        screen.note(
            "stale: the shots of the scan have changed since; 'nightfold fit --again' brings it up to date"
        )
    say_earlier(screen, kept, listed)
    return 0


def _none_of(store: Store, scan: Scan) -> str:
    """Return that a scan has no fits, and which other rounds of its label have some."""
    rounds = Counter(
        fit.scan_id
        for fit in store.fits()
        if scan.label is not None and fit.scan_key.startswith(f"{scan.label}#")
    )
    own = [other for other in store.scans() if other.label == scan.label and rounds[other.id]]
    others = [f"{other.key} has {rounds[other.id]}" for other in own if other.sequence == scan.sequence]
    return f"none of {scan.key}; {', '.join(others)}" if others else _EMPTY


def _draw(
    screen: Screen, fits: Sequence[KeptFit], times: LocalTimes, notes: Mapping[int, list[str]], empty: str
) -> None:
    """Draw a few lines a fit."""
    moments = [times.local(fit.at) for fit in fits]
    columns = [
        Column("fit", right=True),
        Column("scan", wraps=True),
        Column("model", wraps=True),
        Column("estimates"),
        Column("trust"),
        Column(heading(moments, "kept"), spare=1),
        Column("shots", right=True, spare=2),
    ]
    rows: list[Row] = [
        [
            str(fit.id),
            Cell.of((fit.scan_key, fit.observable, *relative_lines(fit), *slice_lines(fit))),
            Cell.of((fit.model, f"along {fit.along}")),
            Cell.of((*_estimates(fit), *_noted(notes.get(fit.id)))),
            Cell.of(_trust(fit)),
            when,
            str(fit.shots),
        ]
        for fit, when in zip(fits, compact(moments), strict=True)
    ]
    screen.table(columns, rows, empty=empty, spaced=True)


def _tabulate(
    screen: Screen, fits: Sequence[KeptFit], times: LocalTimes, notes: Mapping[int, list[str]], empty: str
) -> None:
    """Write a line an estimate, for programs."""
    heads = (
        *("fit", "kept", "scan", "model", "background", "observable", "along", "slice"),
        *("estimate", "value", "stderr", "unit", "low95", "high95", "trusted", "stale", "shots"),
        *("notes", "relative_to"),
    )
    rows: list[Row] = [
        [
            str(fit.id),
            times.stamp(fit.at),
            fit.scan_key,
            fit.model,
            fit.background,
            fit.observable,
            fit.along,
            ", ".join(slice_lines(fit)),
            *row,
            setting(fit.trusted),
            setting(fit.stale),
            str(fit.shots),
            "; ".join(notes.get(fit.id, [])),
            fit.settings.get("relative_to", ""),
        ]
        for fit in fits
        for row in estimates.plain_rows(fit.estimates)
    ]
    screen.table([Column(head) for head in heads], rows, empty=empty)


def _estimates(fit: KeptFit) -> list[str]:
    """Return the estimates, one a line."""
    return [
        f"{name} {value_text(estimate, fixed=estimate.fixed)} {unit_text(estimate, fixed=estimate.fixed)}".rstrip()
        for name, estimate in fit.estimates.items()
    ]


def _noted(texts: list[str] | None) -> list[str]:
    """Return the first words of the notes on a fit, on as many lines as a narrow column needs."""
    return wrap(f"note: {first_words(texts)}", _NOTE_WIDTH) if texts else []


def _trust(fit: KeptFit) -> list[str]:
    """Return whether to trust a fit, and why not."""
    codes = [warning.code for warning in fit.warnings if not warning.advisory]
    return (["yes"] if fit.trusted else ["NO", *codes]) + (["stale"] if fit.stale else [])
