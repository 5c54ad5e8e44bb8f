"""The derived quantities that a scan has: parameters that move with its axes, observables made of what was read."""

from __future__ import annotations

from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass

from nightfold.ledger.columns import Named
from nightfold.ledger.deriving import Makings


@dataclass(frozen=True, slots=True)
class DerivedSettings:
    """Derived parameters that move with the axes of a scan.

    Attributes
    ----------
    named : tuple of Named
    followers : dict of str to str
        Those that depend on one axis, and which.
    mixed : dict of str to tuple of str
        Those that depend on several axes, and which.
    """

    named: tuple[Named, ...]
    followers: dict[str, str]
    mixed: dict[str, tuple[str, ...]]


def derived_settings(
    makings: Makings, machine_id: int, axes: Sequence[str], followers: Mapping[str, str]
) -> DerivedSettings:
    """Return the derived parameters that are made of axes, or of what follows them, and are neither themselves."""
    leaders = {axis: axis for axis in axes} | dict(followers)
    found: dict[str, tuple[str, ...]] = {}
    for name, derived in makings.quantities(machine_id).items():
        if derived.role == "parameter" and name not in leaders:
            inputs = {*derived.parameters, *derived.formulas} & leaders.keys()
            moved_by = {leaders[each] for each in inputs}
            found[name] = tuple(axis for axis in axes if axis in moved_by)
    moving = {name: own for name, own in found.items() if own}
    return DerivedSettings(
        tuple(makings.named("parameter", machine_id, moving)),
        {name: own[0] for name, own in moving.items() if len(own) == 1},
        {name: own for name, own in moving.items() if len(own) > 1},
    )


def derived_readings(makings: Makings, machine_id: int, read: Collection[str]) -> list[Named]:
    """Return the derived observables of which every observable was read."""
    names = [
        name
        for name, derived in makings.quantities(machine_id).items()
        if derived.role == "observable" and set(derived.observables) <= set(read)
    ]
    return makings.named("observable", machine_id, names)
