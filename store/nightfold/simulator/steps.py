"""The sequences of heron that are written in full: step by step, with durations, settings and ramps."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from nightfold.simulator.truth import Value

Stated = tuple[Value | list[float], str | None]
"""A setting of a step and the unit it is written with."""

STEP_SETTINGS: dict[str, Value] = {"evaporate#3.end_power": 0.42, "evaporate#3.duration": 1.6}
"""Settings that ``evaporate-and-look`` can sweep, in W and s."""


@dataclass(frozen=True)
class Step:
    """One step: name, duration in seconds (None: see `HOLD`), settings."""

    name: str
    duration_s: float | None
    settings: Mapping[str, Stated] = field(default_factory=dict)


EVAPORATE_AND_LOOK = (
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

_COOL = (
    Step(
        "load",
        4.2,
        {
            "gradient": (9.4, "G/cm"),
            "detuning": (-22.4, "MHz"),
            "repump_detuning": (-18.1, "MHz"),
        },
    ),
    Step(
        "compress",
        0.028,
        {
            "gradient": (21.5, "G/cm"),
            "ramp": ([9.4, 10.3, 11.8, 13.6, 15.9, 18.2, 20.3, 21.5], None),
            "detuning": (-11.8, "MHz"),
            "cooler_power": (34, "mW"),
            "repump_power": (7.5, "mW"),
        },
    ),
    Step(
        "molasses",
        0.0084,
        {
            "detuning": (23.6, "MHz"),
            "two_photon_detuning": (0.04, "MHz"),
            "start_power": (58, "mW"),
            "end_power": (6.2, "mW"),
            "ramp_time": (4.5, "ms"),
        },
    ),
    Step(
        "pump",
        0.00024,
        {
            "power": (0.85, "mW"),
            "detuning": (1.6, "MHz"),
            "bias": (1.35, "G"),
            "polarisation": ("sigma-minus", None),
        },
    ),
    Step("passage", 0.018, {"start": (14.2, "MHz"), "stop": (12.6, "MHz"), "level": (24.5, "V")}),
    Step("clean", 0.000035, {"power": (1.1, "mW")}),
    Step("trap", 0.12, {"power": (18.5, "W"), "cross_power": (6.8, "W")}),
)
_EVAPORATE = (
    Step(
        "evaporate",
        0.9,
        {
            "end_power": (6.4, "W"),
            "shape": ("exponential", None),
            "ramp": ([18.5, 16.2, 14.1, 12.3, 10.8, 9.42, 8.23, 7.19, 6.4], None),
        },
    ),
    Step(
        "evaporate",
        1.4,
        {
            "end_power": (1.9, "W"),
            "shape": ("exponential", None),
            "ramp": ([6.4, 5.5, 4.72, 4.06, 3.49, 3.0, 2.58, 2.21, 1.9], None),
        },
    ),
    Step(
        "evaporate",
        1.6,
        {
            "end_power": (0.42, "W"),
            "cross_end_power": (1.15, "W"),
            "shape": ("exponential", None),
            "ramp": ([1.9, 1.57, 1.3, 1.08, 0.89, 0.74, 0.61, 0.51, 0.42], None),
        },
    ),
)
_FIELD = Step(
    "field", 0.035, {"settle_time": (60, "ms"), "ramp": ([0, 0.02, 0.1, 0.26, 0.5, 0.74, 0.9, 0.98, 1], None)}
)
_LOOK = (
    Step("release", 0.012),
    Step(
        "image",
        1.62,
        {
            "repump_pulse": (12, "us"),
            "bias": (0.86, "G"),
            "exposure": (180, "us"),
            "bright_delay": (640, "ms"),
            "dark_delay": (980, "ms"),
        },
    ),
)

HOLD = "hold"
"""The step that lasts as long as hold_time says, wherever it stands without a duration of its own."""
HOLD_IN_TRAP = (*_COOL, *_EVAPORATE, _FIELD, Step(HOLD, None, {"gradient_current": (2.15, "A")}), *_LOOK)
"""The steps of ``hold-in-trap``."""

RF_TRANSFER = (
    *_COOL,
    *_EVAPORATE,
    _FIELD,
    Step("pulse", 0.0016, {"level": (11.8, "V"), "shape": ("gaussian", None)}),
    Step("separate", 0.004, {"gradient": (14.5, "G/cm")}),
    *_LOOK,
)
"""The steps of ``rf-transfer``, which pulls two spin states apart and takes one picture of both."""

SETTLE = Step("settle", 0.15, {"current": (44.5, "A")})
"""The step that people put in after the last evaporation, in the second week."""

INSIDE_STEPS = frozenset(
    (
        *("mot_load_time", "mot_gradient", "mot_detuning", "mot_repump_detuning"),
        *("compression_time", "compression_gradient", "compression_detuning"),
        *("compression_cooler_power", "compression_repump_power"),
        *("molasses_time", "molasses_detuning", "molasses_two_photon_detuning"),
        *("molasses_start_power", "molasses_end_power", "molasses_ramp_time"),
        *("pump_time", "pump_power", "pump_detuning", "pump_bias", "pump_polarisation"),
        *("rf_sweep_start", "rf_sweep_stop", "rf_sweep_time", "rf_level", "blast_time", "blast_power"),
        *("trap_ramp_time", "trap_power", "trap_power_cross"),
        *("evaporation_1_time", "evaporation_1_end_power", "evaporation_2_time", "evaporation_2_end_power"),
        *("evaporation_3_time", "evaporation_3_end_power", "evaporation_cross_end_power"),
        *("evaporation_shape", "coil_ramp_time", "coil_settle_time", "gradient_hold_current"),
        *("imaging_repump_pulse", "imaging_bias", "camera_exposure", "bright_delay", "dark_delay"),
    )
)
"""Settings that the sequences written wholly in steps say there, and no longer among their parameters."""


def write_steps(
    name: str, steps: tuple[Step, ...], changed: Mapping[str, Value], hold_ms: float
) -> dict[str, Any]:
    """Return a sequence in full, with those settings and durations of steps that are not nominal."""
    seen: dict[str, int] = {}
    written = []
    for step in steps:
        seen[step.name] = seen.get(step.name, 0) + 1
        place = step.name if seen[step.name] == 1 else f"{step.name}#{seen[step.name]}"
        usual_s = round(hold_ms * 1e-3, 6) if step.duration_s is None else step.duration_s
        duration = {"value": changed.get(f"{place}.duration", usual_s), "unit": "s"}
        settings = {
            key: _with_unit(changed.get(f"{place}.{key}", value), unit)
            for key, (value, unit) in step.settings.items()
        }
        written.append({"name": step.name, "duration": duration, "settings": settings})
    return {"name": name, "steps": written}


def _with_unit(value: Value | list[float], unit: str | None) -> Any:
    if unit is None:
        return list(value) if isinstance(value, list) else value
    return {"value": value, "unit": unit}
