"""A hint for a machine that came up: under a name like that of another one, or with readings of sensors alone."""

from __future__ import annotations

from collections.abc import Collection


def sensors_hint(before: Collection[str], after: Collection[str]) -> str | None:
    """Return a sentence where readings of sensors made a machine beside those that were there before."""
    fresh = sorted(set(after) - set(before))
    if not fresh or not before:
        return None
    others = ", ".join(sorted(before)[:4])
    return (
        f"{fresh[0]} is a new machine, with sensors alone; if its sensors belong to one that was there ({others}), "
        f"name it where the readings are written, and 'nightfold merge-machines {fresh[0]} MACHINE --because TEXT'"
    )


def name_hint(before: Collection[str], after: Collection[str]) -> str | None:
    """Return a sentence where a new machine has nearly the name of one that was there before."""
    from difflib import get_close_matches

    known = {name.casefold(): name for name in before}
    for name in sorted(set(after) - set(before)):
        near = get_close_matches(name.casefold(), known, 1, 0.8)
        if near:
            other = known[near[0]]
            return (
                f"{name} is a new machine beside {other}; if it is the same one, put the name right where the "
                f"records are written, and 'nightfold merge-machines {name} {other} --because TEXT'"
            )
    return None
