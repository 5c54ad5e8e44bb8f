"""The commands, one line each: all that ``nightfold --help`` needs to know."""

from __future__ import annotations

GROUPS = (
    (
        "take shots in",
        (
            ("new", "make a store, and a machine card if asked"),
            ("take", "take shots, or sensors, from files into the store"),
            ("set-aside", "leave shots out of results, or put them back"),
            ("amend", "tell the history of a shot, or correct its settings"),
            ("join", "make one scan of several, or take that back"),
            ("split", "part a scan in two, or take that back"),
            ("note", "write a note on tonight, a shot, a scan or a fit"),
        ),
    ),
    (
        "look",
        (
            ("nights", "list the nights, a line each"),
            ("scans", "list the scans, with axes and a small trend"),
            ("scan", "show one scan: its points and a chart"),
            ("shots", "list shots, or show one in full"),
            ("edits", "list the settings that people changed"),
            ("sensors", "list the sensors, or chart one over time"),
            ("derived", "list the quantities that the card derives of others"),
            ("sequence", "show the steps of a sequence in time, or what differs"),
            ("notes", "find notes by words, subject or time"),
        ),
    ),
    (
        "fit",
        (
            ("fit", "fit models to a scan, with intervals and warnings"),
            ("fits", "list the fits that were kept"),
            ("models", "list the models, or show one in full"),
        ),
    ),
    (
        "keep",
        (
            ("export", "write a scan to a netCDF or CSV file"),
            ("card", "show a machine's card, or those it had before"),
            ("merge-machines", "make a machine taken under a wrong name the right one"),
            ("upgrade", "bring a store of an older nightfold up to date"),
            ("demo", "play six weeks of an invented machine"),
            ("completion", "print what lets bash, zsh or fish complete words"),
        ),
    ),
)

_USAGE = """\
usage: nightfold [--store WHERE] COMMAND …

Every shot of a cold-atom machine, folded into scans and fitted.
"""

_OPTIONS = """\
options, before or after the command:
  --store WHERE  the store: a file, or a PostgreSQL URL
                 (default: $NIGHTFOLD_STORE, else nightfold.sqlite here)
  --json         answer with one JSON object
  --debug        show where in the program an error arose
  --version      show the version
  -h, --help     show this, or the help of a command

exit codes: 0 done, 1 a --check found something, 2 usage, 3 not found,
4 the store needs 'upgrade' or is newer than this program, 5 refused,
130 interrupted

New here? 'nightfold demo' fills a store to play with.
"""


def names() -> list[str]:
    """Return the names of all commands."""
    return [name for _, commands in GROUPS for name, _ in commands]


def line_of(command: str) -> str:
    """Return the line that describes a command."""
    return next(line for _, commands in GROUPS for name, line in commands if name == command)


def overview() -> str:
    """Return the text of ``nightfold --help``."""
    parts = [_USAGE]
    for title, commands in GROUPS:
        parts.append(f"{title}:\n" + "".join(f"  {name:<14}  {line}\n" for name, line in commands))
    return "\n".join([*parts, _OPTIONS])
