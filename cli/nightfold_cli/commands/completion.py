"""``nightfold completion SHELL``: print a script that lets a shell complete words."""

from __future__ import annotations

import re
import sys
from argparse import SUPPRESS, ArgumentParser, Namespace
from collections.abc import Sequence

from nightfold_cli.shellscripts import SCRIPTS

HELP = "print what lets bash, zsh or fish complete words"
EXAMPLES = (
    "nightfold completion zsh",
    "source <(nightfold completion bash)",
)

_PARTED = "\x1f"


def add_arguments(parser: ArgumentParser) -> None:
    """Declare the arguments; ``--complete`` is how the scripts ask."""
    parser.add_argument("shell", metavar="SHELL", choices=tuple(SCRIPTS), nargs="?", help="bash, zsh or fish")
    parser.add_argument("--complete", metavar="WORDS", help=SUPPRESS)


def run(args: Namespace) -> int:
    """Print the script, or answer one."""
    if args.complete is not None:
        _answer(args.complete)
        return 0
    if args.shell is None:
        from nightfold_cli.failures import UsageError

        raise UsageError(f"found no shell, wanted one of {', '.join(SCRIPTS)}")
    from nightfold_cli.render import Screen

    screen = Screen.here(args.json)
    if screen.json:
        screen.answer({"shell": args.shell, "script": SCRIPTS[args.shell]})
    else:
        screen.verbatim(SCRIPTS[args.shell])
    return 0


def _answer(asked: str) -> None:
    """Write a line for each word that may come next: the word, and after a tab what it is.

    Nothing that goes wrong is told: a person is typing.
    """
    shell, *words = asked.split(_PARTED)
    try:
        from nightfold_cli.completing import offers

        cut = 0
        if shell == "bash":
            words = _joined(words)
            cut = _broken_off(words[-1] if words else "")
        lines = [
            f"{word[cut:] if not word.startswith(':') else word}\t{said}"
            for word, said in offers(words)
            if word.isprintable()
        ]
    except Exception:
        return
    sys.stdout.writelines(f"{line}\n" for line in lines)


def _joined(words: Sequence[str]) -> list[str]:
    """Return the words as they were typed: bash parts them at ``=`` and ``:``, and leaves quotes in."""
    joined: list[str] = []
    glue = False
    for word in words:
        if joined and (glue or word in ("=", ":", "://")):
            joined[-1] += word
        else:
            joined.append(word)
        glue = word in ("=", ":") or (glue and not word)
    return [re.sub(r"^[\"']|\\(?=.)|(?<=.)[\"']$", "", word) for word in joined]


def _broken_off(word: str) -> int:
    """Return how much of a word bash does not replace."""
    return max(word.rfind("="), word.rfind(":")) + 1
