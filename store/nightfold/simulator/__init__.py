"""heron, an invented potassium-39 machine: weeks of shots with known truth, for the demo and for tests.

It drives nothing, and its numbers are no real machine's. Truths and noise are set here, whatever fits return.
"""

from nightfold.simulator.truth import (
    Campaign,
    Mishap,
    TrueChange,
    TrueEdit,
    TrueVersion,
    TrueWarming,
    Truth,
)
from nightfold.simulator.writing import shot_records, write_campaign

__all__ = [
    "Campaign",
    "Mishap",
    "TrueChange",
    "TrueEdit",
    "TrueVersion",
    "TrueWarming",
    "Truth",
    "shot_records",
    "write_campaign",
]
