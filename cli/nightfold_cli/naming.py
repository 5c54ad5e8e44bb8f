"""What scans are called, and what a name that a person typed means."""

from __future__ import annotations

from collections.abc import Collection, Iterable
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from nightfold.scans.scan import Scan
    from nightfold.store import Store
    from nightfold_cli.render import Screen


def ambiguous_labels(scans: Iterable[Scan]) -> frozenset[str]:
    """Return the labels that do not name one scan: of several sequences or machines, or read as another's round."""
    users: dict[str, set[tuple[str, str]]] = {}
    keys: dict[str, str] = {}
    for scan in scans:
        if scan.label is not None:
            users.setdefault(scan.label, set()).add((scan.machine, scan.sequence))
            keys[scan.key] = scan.label
    shared = {label for label, streams in users.items() if len(streams) > 1}
    return frozenset(shared | {label for key, label in keys.items() if key in users})


def name_of(scan: Scan, ambiguous: Collection[str]) -> str:
    """Return how a scan is named so that a command finds it again: ``label#round``, its id if the label is shared."""
    return str(scan.id) if scan.label in ambiguous else scan.key


def name_in(store: Store, scan: Scan) -> str:
    """Return how a scan is named among all scans of its store, without reading all of them."""
    from nightfold.errors import ChoiceNeeded

    if scan.label is None:
        return scan.key
    try:
        store.scan(scan.label)
        alone = store.scan(scan.key).id == scan.id
    except ChoiceNeeded:
        alone = False
    return scan.key if alone else str(scan.id)


def shared_names(store: Store) -> dict[tuple[str | None, str, str], str]:
    """Return the names of scans whose label is shared, by machine, sequence and ``label#round``."""
    scans = store.scans()
    ambiguous = ambiguous_labels(scans)
    return {
        (scan.machine, scan.sequence, scan.key): name_of(scan, ambiguous)
        for scan in scans
        if scan.label in ambiguous
    }


def named_scan(store: Store, key: str, screen: Screen) -> Scan:
    """Return the scan that a person named; digits are an id, and a label where there is no such id.

    Raises
    ------
    NotFound, ChoiceNeeded
        As of `Store.scan`.
    """
    from nightfold.errors import NotFound

    if not (key.isascii() and key.isdigit()):
        return store.scan(key)
    labelled = any(scan.label == key for scan in store.scans())
    try:
        found = store.scan(int(key))
    except NotFound:
        if labelled:
            return store.scan(key)
        raise
    if labelled:
        screen.say(f"{key} is scan id {found.id}; the label {key} is {key}#1, or any other round of it")
    return found
