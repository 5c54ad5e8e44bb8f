"""What a reader hands on: one record, or the reason why there is none, and where it stood.

The class is the ledger's, which takes what readers hand on.
"""

from __future__ import annotations

from nightfold.ledger.outcome import Incoming

__all__ = ["Incoming"]
