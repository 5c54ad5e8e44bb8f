"""``nightfold [--store WHERE] COMMAND …``: find the command, run it, turn errors into exit codes.

Nothing heavy is imported here: the overview is a table in `overview`, and only the module of the command that
was asked for is loaded.
"""

from __future__ import annotations

import os
import sys

from nightfold_cli.overview import names, overview

TYPE_CHECKING = False
if TYPE_CHECKING:  # the real one costs the import of typing
    from argparse import ArgumentParser, Namespace
    from collections.abc import Sequence
    from types import ModuleType

DONE, USAGE, INTERRUPTED, BROKEN = 0, 2, 130, 70
_LEADING = ("--json", "--debug")


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the command line and return its exit code.

    Parameters
    ----------
    arguments : sequence of str, optional
        What stands behind ``nightfold``; by default that of this process.
    """
    given = list(sys.argv[1:] if arguments is None else arguments)
    _never_fail_to_write()
    try:
        code = _dispatch(given)
        sys.stdout.flush()
    except BrokenPipeError:
        _mute_stdout()
        return DONE
    except KeyboardInterrupt as stop:
        said = f": {stop}" if str(stop) else ""
        sys.stderr.write(f"\nnightfold: interrupted{said}\n")
        return INTERRUPTED
    return code


def _dispatch(given: list[str]) -> int:
    """Answer what needs no command, else run the command."""
    leading, command, rest = _split(given)
    if command is None:
        return _without_command(leading)
    if command == "help":
        command, rest = (rest[0], ["--help"]) if rest else (None, [])
        if command is None:
            return _without_command(["--help"])
    if command not in names():
        return _unknown(command)
    return _run(command, leading + rest)


def _split(given: list[str]) -> tuple[list[str], str | None, list[str]]:
    """Return the options before the command, the command, and what follows it."""
    leading: list[str] = []
    index = 0
    while index < len(given) and given[index].startswith("-"):
        taken = 2 if given[index] == "--store" else 1
        leading += given[index : index + taken]
        index += taken
    command = given[index] if index < len(given) else None
    return leading, command, given[index + 1 :]


def _without_command(leading: list[str]) -> int:
    """Answer ``--help`` and ``--version``; anything else lacks a command."""
    if "--help" in leading or "-h" in leading:
        sys.stdout.write(overview())
        return DONE
    if "--version" in leading:
        from nightfold import __version__

        sys.stdout.write(f"nightfold {__version__}\n")
        return DONE
    if not leading:
        sys.stderr.write(overview())
        return USAGE
    sys.stderr.write(f"nightfold: no command after {' '.join(leading)}; 'nightfold --help' lists them\n")
    return USAGE


def _unknown(command: str) -> int:
    """Name the commands that look like a mistyped one."""
    from difflib import get_close_matches

    near = get_close_matches(command, names(), n=2, cutoff=0.5)
    advice = f"did you mean {' or '.join(near)}?" if near else "'nightfold --help' lists them"
    sys.stderr.write(f"nightfold: there is no command {command!r}; {advice}\n")
    return USAGE


def _run(command: str, rest: list[str]) -> int:
    """Load one command, parse its arguments, run it."""
    from importlib import import_module

    module = import_module(f"nightfold_cli.commands.{command.replace('-', '_')}")
    try:
        args = _parser(command, module).parse_args(rest)
    except SystemExit as stop:
        return int(stop.code or 0)
    return _guarded(module, args)


def _parser(command: str, module: ModuleType) -> ArgumentParser:
    """Return the parser of one command, with the options that all commands share."""
    from nightfold_cli.arguments import command_parser

    return command_parser(command, module)


def _guarded(module: ModuleType, args: Namespace) -> int:
    """Run a command; say in one line what went wrong."""
    try:
        code: int = module.run(args)
    except (BrokenPipeError, KeyboardInterrupt):
        raise
    except Exception as error:
        if args.debug:
            import traceback

            traceback.print_exc()
        from nightfold_cli.failures import explain
        from nightfold_cli.printable import say

        message, code = explain(error)
        say(message, sys.stderr)
    return code


def _never_fail_to_write() -> None:
    """Spell signs that a terminal cannot show; in a pipe they are escapes, so that nothing is lost."""
    for stream in (sys.stdout, sys.stderr):
        if not hasattr(stream, "reconfigure"):
            continue
        if stream.isatty() and (stream.encoding or "utf-8").lower().replace("-", "") != "utf8":
            from nightfold_cli.spelling import HANDLER

            stream.reconfigure(errors=HANDLER)
        else:
            stream.reconfigure(errors="backslashreplace")


def _mute_stdout() -> None:
    """Send what is still to be written to nowhere: the reader has gone."""
    nowhere = os.open(os.devnull, os.O_WRONLY)
    os.dup2(nowhere, sys.stdout.fileno())


if __name__ == "__main__":
    sys.exit(main())
