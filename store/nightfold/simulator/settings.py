"""The nominal settings of heron: what every shot carries, whatever its sequence.

heron is invented, and so is every number here. It cools potassium-39 on the D2 and D1 lines, loads a crossed
optical trap directly, evaporates at a field set by one pair of coils, and looks at the cloud by absorption.
"""

from __future__ import annotations

from nightfold.simulator.truth import Value

STATED: dict[str, tuple[float, str]] = {
    # slow beam and the trap it loads
    "mot2d_detuning": (-19.5, "MHz"),
    "mot2d_power": (64, "mW"),
    "push_detuning": (-7.5, "MHz"),
    "push_power": (3.2, "mW"),
    "reservoir_setpoint": (61.5, "degC"),
    "mot_detuning": (-22.4, "MHz"),
    "mot_repump_detuning": (-18.1, "MHz"),
    "cooler_power": (96, "mW"),
    "repump_power": (62, "mW"),
    "mot_gradient": (9.4, "G/cm"),
    "mot_load_time": (4.2, "s"),
    # compression and molasses
    "compression_time": (28, "ms"),
    "compression_gradient": (21.5, "G/cm"),
    "compression_detuning": (-11.8, "MHz"),
    "compression_cooler_power": (34, "mW"),
    "compression_repump_power": (7.5, "mW"),
    "molasses_time": (8.4, "ms"),
    "molasses_detuning": (23.6, "MHz"),
    "molasses_two_photon_detuning": (0.04, "MHz"),
    "molasses_start_power": (58, "mW"),
    "molasses_end_power": (6.2, "mW"),
    # optical pumping and spin preparation
    "pump_time": (240, "us"),
    "pump_power": (0.85, "mW"),
    "pump_detuning": (1.6, "MHz"),
    "rf_sweep_start": (14.2, "MHz"),
    "rf_sweep_stop": (12.6, "MHz"),
    "rf_sweep_time": (18, "ms"),
    # the optical trap
    "trap_power": (18.5, "W"),
    "trap_power_cross": (6.8, "W"),
    "trap_ramp_time": (120, "ms"),
    "trap_mirror_x": (4.3, "V"),
    "trap_mirror_y": (5.16, "V"),
    # the coils
    "evaporation_current": (44.5, "A"),
    "coil_current": (48.0, "A"),
    "coil_ramp_time": (35, "ms"),
    "coil_settle_time": (60, "ms"),
    # imaging
    "imaging_detuning": (0.0, "MHz"),
    "imaging_synth_frequency": (82.0, "MHz"),
    "imaging_power": (140, "uW"),
    "imaging_pulse": (40, "us"),
    "time_of_flight": (12, "ms"),
}
"""Settings that the control program writes with their unit."""

UNITS = {name: unit for name, (_, unit) in STATED.items()} | {"rf_frequency": "MHz"}
"""Their units, and those of settings that only one sequence has."""

BARE: dict[str, Value] = {
    # slow beam and the trap it loads
    "mot2d_coil_x": 3.1,
    "mot2d_coil_y": 2.95,
    "mot_coil_current": 31.5,
    "bias_x_current": 0.184,
    "bias_y_current": -0.067,
    "bias_z_current": 0.412,
    "mot_light_on": True,
    # molasses, pumping, spin
    "molasses_ramp_time": 4.5,
    "molasses_bias_x": 0.021,
    "molasses_bias_y": -0.015,
    "molasses_bias_z": 0.108,
    "pump_bias": 1.35,
    "pump_polarisation": "sigma-minus",
    "rf_level": 24.5,
    "spin_state": "down",
    "blast_on": True,
    "blast_time": 35,
    "blast_power": 1.1,
    # the optical trap
    "trap_servo_gain": 0.62,
    "trap_servo_integral": 14.0,
    "cross_servo_gain": 0.48,
    "cross_servo_integral": 11.5,
    "cross_beam_on": True,
    "trap_waveplate": 22.6,
    "cross_waveplate": 41.3,
    "trap_modulation_on": False,
    "trap_modulation_frequency": 1.2,
    # the coils
    "coil_servo_gain": 1.35,
    "coil_servo_integral": 6.1,
    "coil_feedforward": 0.914,
    "coil_water_setpoint": 18.5,
    "gradient_hold_current": 2.15,
    "shim_current_1": 0.052,
    "shim_current_2": -0.118,
    "field_reversed": False,
    # holding and kicking
    "hold_time": 120,
    "kick_voltage": 0.0,
    "kick_time": 0.0,
    "recapture_on": False,
    # imaging
    "imaging_axis": "y",
    "imaging_repump_pulse": 12,
    "imaging_repump_on": True,
    "imaging_bias": 0.86,
    "probe_polarisation": "sigma-minus",
    "camera_gain": 4,
    "camera_exposure": 180,
    "camera_binning": 1,
    "camera_cooler": -18.0,
    "bright_delay": 640,
    "dark_delay": 980,
    "imaging_region": "[388,402,256,256]",
    # locks and shutters
    "lock_d1_offset": 117.4,
    "lock_d2_offset": -64.2,
    "lock_gain": 0.71,
    "cavity_setpoint": 2.318,
    "shutter_cooler_delay": 2.1,
    "shutter_repump_delay": 2.25,
    "shutter_push_delay": 3.4,
    "shutter_molasses_delay": 1.9,
    "shutter_pump_delay": 2.6,
    "shutter_imaging_delay": 2.4,
    "shutter_trap_delay": 5.2,
    # the rest of the laboratory
    "table_air_setpoint": 21.2,
    "fan_on": True,
    "mains_trigger_on": True,
    "mains_trigger_phase": 74.0,
    "pattern_file": "ramps-07",
    "program_version": "2.14",
}
"""Settings that the control program writes bare; their units, if any, stand in the card."""

NAMED_EVAPORATION: dict[str, Value] = {
    "evaporation_1_time": 0.9,
    "evaporation_1_end_power": 6.4,
    "evaporation_2_time": 1.4,
    "evaporation_2_end_power": 1.9,
    "evaporation_3_time": 1.6,
    "evaporation_3_end_power": 0.42,
    "evaporation_cross_end_power": 1.15,
    "evaporation_shape": "exponential",
}
"""The evaporation as flat settings; sequences written in full say them in their steps."""
