"""The sequences of heron and how its control program writes their settings."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from datetime import datetime
from pathlib import Path
from typing import Any

from nightfold.simulator.camera import Look
from nightfold.simulator.settings import BARE, NAMED_EVAPORATION, STATED, UNITS
from nightfold.simulator.steps import (
    EVAPORATE_AND_LOOK,
    HOLD_IN_TRAP,
    INSIDE_STEPS,
    RF_TRANSFER,
    STEP_SETTINGS,
    Step,
    write_steps,
)
from nightfold.simulator.truth import Value

MACHINE = "heron"
ZONE = "Europe/Vienna"
CARD = Path(__file__).with_name("heron.toml")
"""The machine card, as package data."""


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
    left_out : frozenset of str
        Settings that its steps say, so that its parameters do not.
    """

    name: str
    cycle_s: float
    nominal: Mapping[str, Value]
    hold_unit: str | None = None
    steps: tuple[Step, ...] = ()
    left_out: frozenset[str] = frozenset()


_KICK: dict[str, Value] = {"hold_time": 20, "kick_voltage": 1.8, "kick_time": 3.5}
_LONG: dict[str, Value] = {"hold_time": 1000, "coil_current": 0.0}
_DENSE: dict[str, Value] = {"hold_time": 50, "coil_current": 58.2}
_PULSE: dict[str, Value] = {"hold_time": 0, "coil_current": 3.6, "rf_frequency": 13.4, "imaging_axis": "x"}

SEQUENCES: dict[str, SequenceSpec] = {
    spec.name: spec
    for spec in (
        SequenceSpec("hold-in-trap", 12.0, NAMED_EVAPORATION, "ms", HOLD_IN_TRAP, INSIDE_STEPS),
        SequenceSpec("kick-and-hold", 12.3, NAMED_EVAPORATION | _KICK),
        SequenceSpec("long-hold", 11.6, NAMED_EVAPORATION | _LONG, "s"),
        SequenceSpec("dense-hold", 12.5, NAMED_EVAPORATION | _DENSE),
        SequenceSpec("evaporate-and-look", 12.1, {"coil_current": 44.5}, "ms", EVAPORATE_AND_LOOK),
        SequenceSpec("rf-transfer", 12.4, NAMED_EVAPORATION | _PULSE, "ms", RF_TRANSFER, INSIDE_STEPS),
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
            if name not in STEP_SETTINGS and name not in spec.left_out
        }

    def change(self, parameter: str, new: Value) -> Value:
        """Change a setting for good and return the old value."""
        old = self.settings[parameter]
        self.settings[parameter] = new
        self._written[parameter] = self._write_value(parameter, new)
        return old

    def add_step(self, step: Step, after: str) -> None:
        """Put a step into the sequence for good, behind the last one of a name."""
        place = max(number for number, known in enumerate(self.spec.steps, 1) if known.name == after)
        steps = (*self.spec.steps[:place], step, *self.spec.steps[place:])
        self.spec = replace(self.spec, steps=steps)

    def write(
        self,
        uid: str | None,
        started: datetime,
        changed: Mapping[str, Value],
        said: Mapping[str, Any],
        look: Look,
        machine: str = MACHINE,
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
        machine : str
            What the control program thinks the machine is called.
        """
        parameters = {
            name: dict(item) if type(item) is dict else item for name, item in self._written.items()
        }
        for name, value in changed.items():
            if name not in STEP_SETTINGS:
                parameters[name] = self._write_value(name, value)
        record: dict[str, Any] = {"format": 1, "uid": uid, "machine": machine}
        record["started"] = started.isoformat(timespec="milliseconds")
        record["sequence"] = self._write_sequence(changed)
        record |= {**said, "parameters": parameters, "observables": look.observables, "failed": look.failed}
        return {name: item for name, item in record.items() if item is not None}

    def _write_sequence(self, changed: Mapping[str, Value]) -> Any:
        if not self.spec.steps:
            return self.spec.name
        hold_ms = float(changed.get("hold_time", self.settings["hold_time"]))
        return write_steps(self.spec.name, self.spec.steps, changed, hold_ms)

    def _write_value(self, name: str, value: Value) -> Any:
        """Return a setting as the control program writes it: bare, or with a unit."""
        unit = self.spec.hold_unit if name == "hold_time" else UNITS.get(name)
        if unit is None:
            return value
        if unit == "s" and name == "hold_time":
            value = round(float(value) * 1e-3, 6)
        return {"value": value, "unit": unit}
