"""``nightfold fit --again``: kept fits whose data have changed, done again as they were."""

from __future__ import annotations

import math
import sys
from argparse import Action, ArgumentParser, Namespace
from collections.abc import Sequence
from itertools import zip_longest
from typing import TYPE_CHECKING, Any

from nightfold.concise import NOT_DETERMINED
from nightfold_cli.estimates import plain_rows, unit_text, value_text
from nightfold_cli.failures import UsageError
from nightfold_cli.keptfits import kept_entry, named_fits, relative_lines, slice_lines
from nightfold_cli.layout import Column, Row
from nightfold_cli.naming import named_scan
from nightfold_cli.opening import opened
from nightfold_cli.progress import Progress
from nightfold_cli.render import Screen
from nightfold_cli.scantext import counted
from nightfold_cli.settings import setting

if TYPE_CHECKING:
    from nightfold.fits.again import Refit
    from nightfold.fits.keptfit import KeptEstimate, KeptFit
    from nightfold.store import Store

_BACKGROUND = ("offset", "slope")
_NOTHING = "no kept fit is stale: nothing to do again"


class _Again(Action):
    """The option that stands in place of the scan and the models; once it is given they are not asked for."""

    def __init__(
        self, option_strings: Sequence[str], dest: str, instead: Sequence[Action], **kwargs: Any
    ) -> None:
        super().__init__(option_strings, dest, nargs="?", default=None, **kwargs)
        self.instead = instead

    def __call__(
        self, parser: ArgumentParser, namespace: Namespace, values: Any, option_string: str | None = None
    ) -> None:
        """Keep the key, the empty text for all."""
        setattr(namespace, self.dest, values or "")
        for action in self.instead:
            action.required = False


def add_again(parser: ArgumentParser, key: Action, models: Action) -> None:
    """Declare the option."""
    indent = " " * len("usage: ")
    parser.usage = f"{parser.prog} KEY MODEL [MODEL ...] [option ...]\n{indent}{parser.prog} --again [KEY]"
    parser.add_argument(
        "--again",
        action=_Again,
        instead=(key, models),
        metavar="KEY",
        help="do kept fits again whose data have changed, of this scan or of all; takes no MODEL",
    )


def fit_again(args: Namespace, screen: Screen) -> int:
    """Do stale fits again, and show what they were and are."""
    key = _key(args)
    with opened(args, screen) as store:
        scan = None if key is None else named_scan(store, key, screen)
        with Progress("fitting again", 0, sys.stderr):
            done = store.refit(scan.id if scan else None)
        pairs = _named(store, done)
    if screen.json:
        screen.answer({
            "fits": [
                {**kept_entry(after), "before": kept_entry(before) if before else None}
                for before, after, left in pairs
                if after is not None
            ],
            "left": [
                {**kept_entry(before), "reason": left} for before, _, left in pairs if before and left is not None
            ],
        })  # fmt: skip
    elif screen.terminal:
        _draw(screen, pairs)
    else:
        _tabulate(screen, pairs)
    return 0


_Pair = tuple["KeptFit | None", "KeptFit | None", "str | None"]


def _key(args: Namespace) -> str | None:
    """Return the scan whose fits are done again, None for all.

    Raises
    ------
    UsageError
        If models or options of a new fit are given too.
    """
    words = [word for word in (args.again, args.key, *(args.models or ())) if word]
    if len(words) > 1:
        raise UsageError(
            f"--again: found {' and '.join(words)}, wanted one scan at most, and no model: "
            "kept fits are done again as they were"
        )
    options = {
        "-o": args.observable, "--along": args.along, "--background": args.background, "--plain": args.plain,
        "--fixed": args.fixed, "--start": args.start, "--no-keep": args.no_keep,
        "--figure": args.figure, "--estimate": args.estimate,
        "--relative-to": getattr(args, "relative_to", None),
    }  # fmt: skip
    given = [name for name, value in options.items() if value]
    if given:
        raise UsageError(f"--again: kept fits are done again as they were; {given[0]} is for new ones")
    return words[0] if words else None


def _named(store: Store, done: Sequence[Refit]) -> list[_Pair]:
    """Return what was and is, each with the name that its scan goes by, and why it was left."""
    every = [fit for one in done for fit in (one.before, one.after) if fit is not None]
    names = {fit.id: fit for fit in named_fits(store, every)}
    return [
        (
            names[one.before.id] if one.before else None,
            names[one.after.id] if one.after else None,
            one.left,
        )
        for one in done
    ]


def _draw(screen: Screen, pairs: Sequence[_Pair]) -> None:
    """Draw a line an estimate, and say what was left."""
    if not pairs:
        screen.text(_NOTHING)
        return
    done = [(before, after) for before, after, _ in pairs if after is not None]
    if done:
        screen.heading(f"{counted(len(done), 'fit')} done again")
        columns = [
            Column("fit", wraps=True),
            Column("estimate", wraps=True),
            Column("before", right=True),
            Column("now", right=True),
            Column("unit", spare=1),
            Column("moved by", right=True),
        ]
        screen.table(columns, [row for before, after in done for row in _rows(before, after)][:-1], empty="")
        screen.note("moved by: in units of the stderr that the fit had before")
    doubted = [after for _, after in done if not after.trusted]
    if doubted:
        screen.heading(f"DO NOT TRUST {len(doubted)} of {len(done)}")
        for fit in doubted:
            screen.item(_title(fit), ", ".join(item.code for item in fit.warnings if not item.advisory))
    left = [(before, why) for before, _, why in pairs if before is not None and why is not None]
    if left:
        screen.heading(f"{counted(len(left), 'fit')} left as {'it was' if len(left) == 1 else 'they were'}")
        for before, why in left:
            screen.item(_title(before), why)


def _rows(before: KeptFit | None, after: KeptFit) -> list[Row]:
    """Return a line an estimate, beside them what was fitted, and an empty line below."""
    heads = [after.scan_key, after.model, after.observable, *relative_lines(after), *slice_lines(after)]
    rows: list[Row] = []
    for head, name in zip_longest(heads, _primary(after), fillvalue=""):
        if not name:
            rows.append([head, "", "", "", "", ""])
            continue
        unit = unit_text(after.estimates[name], fixed=after.estimates[name].fixed)
        rows.append(
            [head, name, _value(before, name), _value(after, name), unit, _moved(before, after, name)]
        )
    return [*rows, [""] * 6]


def _title(fit: KeptFit) -> str:
    """Return what was fitted, in a line."""
    where = "".join(f", {line}" for line in (*relative_lines(fit), *slice_lines(fit)))
    return f"{fit.scan_key}, {fit.model} of {fit.observable}{where}"


def _tabulate(screen: Screen, pairs: Sequence[_Pair]) -> None:
    """Write a line an estimate, for programs; what was left goes to stderr."""
    heads = (
        *("fit", "scan", "model", "observable", "along", "slice", "estimate"),
        *("value", "stderr", "unit", "low95", "high95", "before", "before_stderr", "trusted"),
    )
    rows: list[Row] = []
    for before, after, why in pairs:
        if after is None:
            if before is not None:
                screen.say(f"left: fit {before.id}, {before.model} of {before.scan_key}: {why}")
            continue
        for row in plain_rows(after.estimates):
            old = before.estimates.get(str(row[0])) if before else None
            was = [repr(old.value), repr(old.stderr)] if old else ["", ""]
            where = ", ".join(slice_lines(after))
            own = [str(after.id), after.scan_key, after.model, after.observable, after.along, where]
            rows.append([*own, *row, *was, setting(after.trusted)])
    screen.table([Column(head) for head in heads], rows, empty=_NOTHING)


def _primary(fit: KeptFit) -> list[str]:
    """Return the estimates that are not held and not of the background; all, where there are no others."""
    names = [name for name, value in fit.estimates.items() if not value.fixed and name not in _BACKGROUND]
    return names or list(fit.estimates)


def _value(fit: KeptFit | None, name: str) -> str:
    """Return an estimate of a fit with its stderr, if it has it."""
    estimate = _of(fit, name)
    if estimate is None:
        return "-"
    return value_text(estimate, fixed=estimate.fixed)


def _of(fit: KeptFit | None, name: str) -> KeptEstimate | None:
    return fit.estimates.get(name) if fit is not None else None


def _moved(before: KeptFit | None, after: KeptFit, name: str) -> str:
    """Return by how much an estimate moved, in units of the stderr it had."""
    old, new = _of(before, name), after.estimates[name]
    if old is not None and NOT_DETERMINED in (_value(before, name), _value(after, name)):
        return ""
    if old is None or not (
        old.stderr > 0 and math.isfinite(old.stderr) and math.isfinite(new.value - old.value)
    ):
        return "-"
    moved = f"{(new.value - old.value) / old.stderr:+.1f}"
    return "0.0" if moved in ("+0.0", "-0.0") else moved
