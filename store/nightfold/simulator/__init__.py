"""heron, an invented potassium-39 machine: weeks of shots with known truth, for the demo and for tests.

It drives nothing, and its numbers are no real machine's. Truths and noise are set here, whatever fits return.
"""

from nightfold.simulator.truth import Campaign, TrueChange, TrueEdit, Truth
from nightfold.simulator.writing import shot_records, write_campaign

__all__ = ["Campaign", "TrueChange", "TrueEdit", "Truth", "shot_records", "write_campaign"]
