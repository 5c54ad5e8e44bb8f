"""Arguments that commands share, and the parser of one command."""

from __future__ import annotations

import os
import re
from argparse import Action, ArgumentParser, ArgumentTypeError, Namespace, RawDescriptionHelpFormatter
from collections.abc import Sequence
from types import ModuleType
from typing import TYPE_CHECKING, Any, NoReturn, TypeVar

if TYPE_CHECKING:
    from argparse import _MutuallyExclusiveGroup

    from nightfold_cli.render import Screen

Item = TypeVar("Item")
DEFAULT_STORE = "nightfold.sqlite"


class CommandParser(ArgumentParser):
    """A parser that says in one line what is wrong."""

    def error(self, message: str) -> NoReturn:
        """Leave with exit code 2."""
        self.exit(2, f"{self.prog}: {message}\n'{self.prog} --help' shows what can be said\n")


def command_parser(command: str, module: ModuleType) -> ArgumentParser:
    """Return the parser of one command.

    The module brings ``HELP`` (one line), ``EXAMPLES`` (lines of shell) and ``add_arguments``; options that
    all commands know are added here.
    """
    parser = CommandParser(
        prog=f"nightfold {command}",
        description=module.HELP[0].upper() + module.HELP[1:] + ".",
        epilog="examples:\n" + "".join(f"  {line}\n" for line in module.EXAMPLES),
        formatter_class=RawDescriptionHelpFormatter,
        allow_abbrev=False,
    )
    module.add_arguments(parser)
    shared = parser.add_argument_group("every command")
    shared.add_argument(
        "--store",
        metavar="WHERE",
        default=os.environ.get("NIGHTFOLD_STORE") or DEFAULT_STORE,
        help="a file or a PostgreSQL URL (default: $NIGHTFOLD_STORE, else nightfold.sqlite here)",
    )
    shared.add_argument("--json", action="store_true", help="answer with one JSON object")
    shared.add_argument("--debug", action="store_true", help="show where in the program an error arose")
    return parser


def add_scan_key(parser: ArgumentParser) -> Action:
    """Declare the argument that names a scan."""
    return parser.add_argument(
        "key", metavar="KEY", help="id, label (its newest round) or label#round of a scan"
    )


def add_subject(parser: ArgumentParser) -> _MutuallyExclusiveGroup:
    """Declare the options that name what a note is about, one of them at most."""
    what = parser.add_mutually_exclusive_group()
    what.add_argument("--shot", metavar="UID", help="on this shot, or the unique beginning of its uid")
    what.add_argument("--scan", metavar="KEY", help="on this scan")
    what.add_argument("--fit", metavar="N", type=positive, help="on this fit, by its number in 'fits'")
    what.add_argument("--night", metavar="DATE", help="on this night, by the date of its evening")
    return what


def add_by(parser: ArgumentParser) -> None:
    """Declare the option that says who did something."""
    parser.add_argument("--by", metavar="NAME", help="who says so (default: the user logged in)")


def by_whom(args: Namespace) -> str | None:
    """Return who did something: as the option says, else who is logged in, None where that cannot be told."""
    import getpass

    named: str | None = args.by
    try:
        return named or getpass.getuser()
    except (OSError, KeyError):
        return None


def add_last(parser: ArgumentParser, on_screen: int) -> None:
    """Declare the options that say how many of a list are shown; without them, on a terminal, the last `on_screen`."""
    parser.add_argument("--last", metavar="N", type=positive, help=f"the last N (on a terminal {on_screen})")
    parser.add_argument("--all", action="store_true", help="all of them, on a terminal too")
    parser.set_defaults(on_screen=on_screen)


def the_last(args: Namespace, screen: Screen, found: list[Item]) -> list[Item]:
    """Return as many of a list, from its end, as those options say."""
    last = args.last or (args.on_screen if screen.terminal and not args.all else len(found))
    return found[-last:] if last else found


def say_earlier(screen: Screen, found: Sequence[Any], listed: Sequence[Any]) -> None:
    """Say how many of a list were not shown, if any."""
    if len(found) > len(listed):
        screen.note(f"{len(found) - len(listed)} earlier ones not shown; --all shows them")


def add_relative(parser: ArgumentParser) -> None:
    """Declare the options that relate readings to reference shots."""
    parser.add_argument(
        "--relative-to",
        choices=("reference",),
        help="divide readings by those of the reference shots around them",
    )
    parser.add_argument(
        "--reference-within",
        metavar="TIME",
        default="30 min",
        type=_span,
        help="how far a reference shot may be from a shot: '2 h', or seconds (default: 30 min)",
    )


def relation(args: Namespace) -> dict[str, Any]:
    """Return those options as `Scan.table` and `Store.fit` take them."""
    return {"relative_to": args.relative_to, "reference_within": args.reference_within}


def _span(text: str) -> str | float:
    """Return seconds if it is a number, else the text."""
    try:
        return float(text)
    except ValueError:
        return text


def named_number(text: str) -> tuple[str, float]:
    """Return name and number of ``name=value``."""
    name, equals, number = text.partition("=")
    try:
        return name.strip(), float(number if equals else "")
    except ValueError:
        raise ArgumentTypeError(f"found {text!r}, wanted NAME=NUMBER, as in center=33.6") from None


def positive(text: str) -> int:
    """Return a whole number above zero."""
    if not re.fullmatch(r"0*[1-9]\d*", text):
        raise ArgumentTypeError(f"found {text!r}, wanted a whole number above zero")
    return int(text)
