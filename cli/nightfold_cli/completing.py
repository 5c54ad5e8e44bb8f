"""What a shell may offer behind the words typed so far.

A command's own parser says what comes next: an option, one of its choices, a name that is looked up in the store.
"""

from __future__ import annotations

import os
from argparse import SUPPRESS, Action, ArgumentParser
from collections.abc import Iterable, Sequence
from importlib import import_module

from nightfold_cli.arguments import DEFAULT_STORE, command_parser
from nightfold_cli.overview import GROUPS, names

FILES = ":files"
"""Said in place of words where a file comes next: the shell knows files best."""

Offer = tuple[str, str]

_LEADING = (
    ("--store", "a file or a PostgreSQL URL"),
    ("--json", "answer with one JSON object"),
    ("--debug", "show where in the program an error arose"),
    ("--version", "show the version"),
    ("--help", "show the commands"),
)
_BY_METAVAR = {"KEY": "scans", "MODEL": "models", "FILE": FILES, "FOLDER": FILES, "CARD": FILES}
_BY_DEST = {
    "machine": "machines",
    "old": "machines",
    "into": "machines",
    "sequence": "sequences",
    "observable": "observables",
    "parameter": "parameters",
    "along": "axes",
    "sensor": "sensors",
    "store": FILES,
}
_BY_COMMAND = {"sequence": "sequences", "models": "models", "sensors": "sensors"}


def offers(words: Sequence[str]) -> list[Offer]:
    """Return what can stand in place of the last word, each with a line about it.

    Parameters
    ----------
    words : sequence of str
        What stands behind ``nightfold``, up to the cursor; the last one is being typed and may be empty.
    """
    before, typed = list(words[:-1]), words[-1] if words else ""
    found = _next(before, typed)
    return [offer for offer in found if offer[0] == FILES or offer[0].startswith(typed)]


def _next(before: list[str], typed: str) -> list[Offer]:
    place = 0
    while place < len(before) and before[place].startswith("-"):
        if before[place] == "--store" and place + 1 == len(before):
            return [(FILES, "")]
        place += 2 if before[place] == "--store" else 1
    if place >= len(before):
        return list(_LEADING) if typed.startswith("-") else _commands()
    command = before[place]
    if command == "help":
        return _commands() if place + 1 == len(before) else []
    if command not in names():
        return []
    parser = command_parser(command, import_module(f"nightfold_cli.commands.{command.replace('-', '_')}"))
    return _within(parser, command, before[place + 1 :], typed, _store_of(before))


def _commands() -> list[Offer]:
    return [*(pair for _, commands in GROUPS for pair in commands), ("help", "show the help of a command")]


def _store_of(words: Sequence[str]) -> str:
    """Return the store that the words name, or the one that would be used without."""
    where = os.environ.get("NIGHTFOLD_STORE") or DEFAULT_STORE
    for number, word in enumerate(words):
        if word == "--store" and number + 1 < len(words):
            where = words[number + 1]
        elif word.startswith("--store="):
            where = word.partition("=")[2]
    return os.path.expanduser(where)  # noqa: PTH111  a URL is no path


def _within(
    parser: ArgumentParser, command: str, before: Sequence[str], typed: str, where: str
) -> list[Offer]:
    """Return what comes next among the arguments of a command."""
    options = {name: action for action in parser._actions for name in action.option_strings}
    waiting: Action | None = None
    used: set[str] = set()
    filled = 0
    only_words = False
    for word in before:
        if waiting is not None and not (waiting.nargs == "?" and word.startswith("-")):
            waiting = None
        elif word == "--" and not only_words:
            only_words = True
        elif word.startswith("-") and len(word) > 1 and not only_words:
            name, equals, _ = word.partition("=")
            action = options.get(name)
            used.add(name)
            waiting = action if action is not None and action.nargs != 0 and not equals else None
        else:
            filled += 1
    if waiting is not None and not (waiting.nargs == "?" and typed.startswith("-")):
        return _values(waiting, command, typed, where)
    if typed.startswith("-") and not only_words:
        name, equals, value = typed.partition("=")
        if equals:
            action = options.get(name)
            values = _values(action, command, value, where) if action and action.nargs != 0 else []
            return [(f"{name}={text}", said) for text, said in values if text != FILES]
        return _option_names(parser, used)
    action = _positional(parser, filled)
    return [] if action is None else _values(action, command, typed, where)


def _positional(parser: ArgumentParser, filled: int) -> Action | None:
    """Return the argument that a word takes which stands behind so many others."""
    for action in parser._actions:
        if action.option_strings or action.help == SUPPRESS:
            continue
        if action.nargs in ("+", "*") or filled == 0:
            return action
        filled -= 1
    return None


def _option_names(parser: ArgumentParser, used: Iterable[str]) -> list[Offer]:
    """Return the options not given yet, by their long names; those that may be repeated stay."""
    given = set(used)
    found = []
    for action in parser._actions:
        if not action.option_strings or action.help == SUPPRESS:
            continue
        again = type(action).__name__ == "_AppendAction"
        if again or given.isdisjoint(action.option_strings):
            found.append((action.option_strings[-1], " ".join((action.help or "").split())))
    return found


def _values(action: Action, command: str, typed: str, where: str) -> list[Offer]:
    """Return what may stand as the value of an argument."""
    if action.choices is not None:
        return [(str(choice), "") for choice in action.choices]
    kind = _BY_METAVAR.get(str(action.metavar)) or _BY_DEST.get(action.dest)
    if not action.option_strings and kind is None:
        kind = _BY_COMMAND.get(command)
    if kind is None:
        return []
    if kind == FILES:
        return [(FILES, "")]
    if kind == "models":
        from nightfold.fits.models import MODEL_NAMES

        return [(name, "") for name in MODEL_NAMES]
    from nightfold.glimpse import names_in_store

    found = names_in_store(where, kind)
    return _few_keys(found, typed) if kind == "scans" else found


def _few_keys(keys: Sequence[Offer], typed: str) -> list[Offer]:
    """Return labels alone where there are any, rounds once ``#`` is typed, and ids once a digit is."""
    if typed.isdigit():
        return list(keys)
    if "#" in typed:
        return [key for key in keys if "#" in key[0]]
    labels = [key for key in keys if "#" not in key[0] and not key[0].isdigit()]
    return labels or list(keys)
