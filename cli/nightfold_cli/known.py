"""Whether the names that a command was asked for are known to the store."""

from __future__ import annotations

from collections.abc import Iterable
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from nightfold.scans.scan import Scan
    from nightfold.store import Store
    from nightfold_cli.render import Screen


def check_machine(store: Store, name: str | None, screen: Screen) -> str | None:
    """Return the name of a machine as the store has it; None stands for all.

    A name that was merged into another machine's is taken for that one, and a remark says so.

    Raises
    ------
    NotFound
    """
    if name is None:
        return None
    known = store.machine(name)
    if known != name:
        screen.say(f"{name} is another name of {known}")
    return known


def check_parameter(store: Store, name: str | None, machine: str | None = None) -> None:
    """Refuse a parameter that no shot has; None stands for all.

    Raises
    ------
    NotFound
    """
    if name is not None:
        place = f"of {machine}" if machine else "in this store"
        _check("parameter", name, store.parameters(machine)["name"].tolist(), place)


def check_sequence(name: str | None, known: Iterable[str]) -> None:
    """Refuse a sequence that is not among those known; None stands for all.

    Raises
    ------
    NotFound
    """
    if name is not None:
        _check("sequence", name, known, "in this store")


def check_observable(name: str | None, known: Iterable[str], where: str) -> None:
    """Refuse an observable that is not among those known; None stands for the main one.

    Raises
    ------
    NotFound
    """
    if name is not None:
        _check("observable", name, known, where)


def drawn_together(scan: Scan, asked: str | None) -> list[str]:
    """Return the observables to draw in one chart: the one asked for, or all clouds of one.

    Raises
    ------
    NotFound
    """
    from nightfold.card import without_cloud

    main = scan.main_observable
    if asked in scan.observables or (asked is None and main is None):
        return [] if asked is None else [asked]
    base = asked if asked is not None else without_cloud(main or "")
    clouds = [name for name in scan.observables if without_cloud(name) == base]
    if not clouds:
        check_observable(asked, scan.observables, f"in scan {scan.key}")
    return clouds


def _check(what: str, name: str, known: Iterable[str], where: str) -> None:
    """Refuse a name that is not among those known, and say which come close."""
    from nightfold.errors import NotFound
    from nightfold.ledger.selecting import near_miss

    names = list(dict.fromkeys(known))
    if name not in names:
        raise NotFound(f"{what} {name!r}: not {where}; {near_miss(name, names)}")
