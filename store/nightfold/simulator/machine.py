"""The sequences of heron and how its control program writes their settings."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import datetime
from pathlib import Path
from typing import Any

from nightfold.simulator.camera import Look
from nightfold.simulator.settings import BARE, NAMED_EVAPORATION, STATED
from nightfold.simulator.truth import Value

MACHINE = "heron"
ZONE = "Europe/Vienna"
CARD = Path(__file__).with_name("heron.toml")
"""The machine card, as package data."""

STEP_SETTINGS: dict[str, Value] = {"evaporate#3.end_power": 0.42, "evaporate#3.duration": 1.6}
"""Settings that the sequence written in full can sweep, in W and s."""


@dataclass(frozen=True)
class Step:
    """One step of a sequence written in full: name, duration in seconds, settings as (value, unit)."""

    name: str
    duration_s: float
    settings: Mapping[str, tuple[Value | list[float], str | None]] = field(default_factory=dict)


@dataclass(frozen=True)
class SequenceSpec:
    """A sequence: its own nominal settings, the rest of its cycle, and how it is written.

    Attributes
    ----------
    name : str
    cycle_s : float
        The cycle without hold_time and the third evaporation.
    nominal : mapping of str to number, text or truth
        In the card's units.
    hold_unit : str or None
        The unit stated for hold_time; None writes it bare. The card has ms.
    steps : tuple of Step
        Empty for a sequence known by name.
    """

    name: str
    cycle_s: float
    nominal: Mapping[str, Value]
    hold_unit: str | None = None
    steps: tuple[Step, ...] = ()


STEPS = (
    Step("load", 4.2, {"gradient": (9.4, "G/cm")}),
    Step("compress", 0.028, {"gradient": (21.5, "G/cm"), "ramp": ([9.4, 13.6, 18.2, 21.5], None)}),
    Step("molasses", 0.0084, {"end_power": (6.2, "mW")}),
    Step("trap", 0.12, {"power": (18.5, "W")}),
    Step("evaporate", 0.9, {"end_power": (6.4, "W"), "shape": ("exponential", None)}),
    Step("evaporate", 1.4, {"end_power": (1.9, "W"), "shape": ("exponential", None)}),
    Step("evaporate", 1.6, {"end_power": (0.42, "W"), "shape": ("exponential", None)}),
    Step("hold", 0.12, {"current": (44.5, "A")}),
    Step("release", 0.012),
    Step("image", 0.00004, {"camera_trigger_on": (True, None)}),
)
"""The steps of ``evaporate-and-look``; the third evaporation is ``evaporate#3`` among the parameters."""

_KICK: dict[str, Value] = {"hold_time": 20, "kick_voltage": 1.8, "kick_time": 3.5}
_LONG: dict[str, Value] = {"hold_time": 1000, "coil_current": 0.0}
_DENSE: dict[str, Value] = {"hold_time": 50, "coil_current": 58.2}

SEQUENCES: dict[str, SequenceSpec] = {
    spec.name: spec
    for spec in (
        SequenceSpec("hold-in-trap", 12.0, NAMED_EVAPORATION, "ms"),
        SequenceSpec("kick-and-hold", 12.3, NAMED_EVAPORATION | _KICK),
        SequenceSpec("long-hold", 11.6, NAMED_EVAPORATION | _LONG, "s"),
        SequenceSpec("dense-hold", 12.5, NAMED_EVAPORATION | _DENSE),
        SequenceSpec("evaporate-and-look", 12.1, {"coil_current": 44.5}, "ms", STEPS),
    )
}
"""Every sequence by name."""


class Recorder:
    """The settings of one sequence as they stand, and its shots as records.

    Attributes
    ----------
    spec : SequenceSpec
    settings : dict
        Name to value, in the card's units.
    """

    def __init__(self, spec: SequenceSpec) -> None:
        self.spec = spec
        stated: dict[str, Value] = {name: value for name, (value, _) in STATED.items()}
        self.settings: dict[str, Value] = stated | BARE | STEP_SETTINGS | dict(spec.nominal)
        self._written = {
            name: self._write_value(name, value)
            for name, value in self.settings.items()
            if name not in STEP_SETTINGS
        }

    def change(self, parameter: str, new: Value) -> Value:
        """Change a setting for good and return the old value."""
        old = self.settings[parameter]
        self.settings[parameter] = new
        self._written[parameter] = self._write_value(parameter, new)
        return old

    def write(
        self,
        uid: str | None,
        started: datetime,
        changed: Mapping[str, Value],
        said: Mapping[str, Any],
        look: Look,
    ) -> dict[str, Any]:
        """Return the record of a shot.

        Parameters
        ----------
        uid : str or None
            Left out if None.
        started : datetime
            Local time.
        changed : mapping
            Settings of this shot that are not as they stand.
        said : mapping
            What the record says about the scan.
        look : Look
            What was read.
        """
        parameters = {
            name: dict(item) if type(item) is dict else item for name, item in self._written.items()
        }
        for name, value in changed.items():
            if name not in STEP_SETTINGS:
                parameters[name] = self._write_value(name, value)
        record: dict[str, Any] = {"format": 1, "uid": uid, "machine": MACHINE}
        record["started"] = started.isoformat(timespec="milliseconds")
        record["sequence"] = _write_steps(self.spec, changed) if self.spec.steps else self.spec.name
        record |= {**said, "parameters": parameters, "observables": look.observables, "failed": look.failed}
        return {name: item for name, item in record.items() if item is not None}

    def _write_value(self, name: str, value: Value) -> Any:
        """Return a setting as the control program writes it: bare, or with a unit."""
        unit = self.spec.hold_unit if name == "hold_time" else STATED[name][1] if name in STATED else None
        if unit is None:
            return value
        if unit == "s" and name == "hold_time":
            value = round(float(value) * 1e-3, 6)
        return {"value": value, "unit": unit}


def _write_steps(spec: SequenceSpec, changed: Mapping[str, Value]) -> dict[str, Any]:
    """Return a sequence in full, with those settings and durations of steps that are not nominal."""
    seen: dict[str, int] = {}
    steps = []
    for step in spec.steps:
        seen[step.name] = seen.get(step.name, 0) + 1
        place = step.name if seen[step.name] == 1 else f"{step.name}#{seen[step.name]}"
        settings = {
            name: _with_unit(changed.get(f"{place}.{name}", value), unit)
            for name, (value, unit) in step.settings.items()
        }
        duration = {"value": changed.get(f"{place}.duration", step.duration_s), "unit": "s"}
        steps.append({"name": step.name, "duration": duration, "settings": settings})
    return {"name": spec.name, "steps": steps}


def _with_unit(value: Value | list[float], unit: str | None) -> Any:
    if unit is None:
        return list(value) if isinstance(value, list) else value
    return {"value": value, "unit": unit}
