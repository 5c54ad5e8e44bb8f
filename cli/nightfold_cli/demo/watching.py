"""What the demo's store tells of the machine beside fits: late readings, a new step, a warmer room, notes."""

from __future__ import annotations

import math
from dataclasses import dataclass
from datetime import date, datetime, timedelta
from typing import TYPE_CHECKING

from nightfold_cli.demo.truths import MACHINE

if TYPE_CHECKING:
    from nightfold.simulator import Campaign, TrueVersion, TrueWarming
    from nightfold.store import Store

LONGEST_DAYS = 6
"""So many whole days before and after an edit are compared."""


@dataclass(frozen=True, slots=True)
class SeenVersion:
    """A step put into a sequence, and when the store has the first shot of a version with it."""

    truth: TrueVersion
    versions: int
    found: datetime | None


@dataclass(frozen=True, slots=True)
class SeenWarming:
    """A sensor that settled higher, and by how much the daily means say so; None with too few days."""

    truth: TrueWarming
    step: float | None
    stderr: float | None


@dataclass(frozen=True, slots=True)
class Seen:
    """All of it."""

    amended: int
    notes: int
    readings: int
    sensors: int
    versions: tuple[SeenVersion, ...]
    warmings: tuple[SeenWarming, ...]


def look_on(store: Store, campaign: Campaign, amended: int, readings: int) -> Seen:
    """Return what the store tells.

    Parameters
    ----------
    store : Store
    campaign : Campaign
    amended : int
        Shots that were amended while the nights were taken.
    readings : int
        Of sensors, new.
    """
    return Seen(
        amended=amended,
        notes=len(store.notes()),
        readings=readings,
        sensors=len(store.sensors()),
        versions=tuple(_version(store, truth) for truth in campaign.versions),
        warmings=tuple(_warming(store, truth) for truth in campaign.warmings),
    )


def _version(store: Store, truth: TrueVersion) -> SeenVersion:
    versions = store.sequence(truth.sequence, machine=MACHINE).versions
    with_it = (
        version.first
        for version in versions
        if version.steps and any(step.name == truth.step for step in version.steps)
    )
    return SeenVersion(truth, len(versions), min(with_it, default=None))


def _warming(store: Store, truth: TrueWarming) -> SeenWarming:
    """Compare the means of whole days before and after; their scatter gives the standard uncertainty."""
    day = truth.at.date()
    before = _daily_means(store, truth.sensor, day - timedelta(days=LONGEST_DAYS), day)
    after = _daily_means(store, truth.sensor, day + timedelta(days=2), day + timedelta(days=2 + LONGEST_DAYS))
    if len(before) < 2 or len(after) < 2:
        return SeenWarming(truth, None, None)
    (low, low_variance), (high, high_variance) = _mean(before), _mean(after)
    return SeenWarming(truth, high - low, math.sqrt(low_variance + high_variance))


def _daily_means(store: Store, sensor: str, since: date, until: date) -> list[float]:
    """Return the means of the whole days of a span that have readings."""
    means = []
    for number in range((until - since).days):
        day, following = since + timedelta(days=number), since + timedelta(days=number + 1)
        read = store.sensor(sensor, str(day), str(following), machine=MACHINE)["value"]
        if len(read) >= 23 * 60:
            means.append(float(read.mean()))
    return means


def _mean(values: list[float]) -> tuple[float, float]:
    """Return the mean and its variance."""
    mean = math.fsum(values) / len(values)
    spread = math.fsum((value - mean) ** 2 for value in values)
    return mean, spread / (len(values) - 1) / len(values)
