"""What every face of a store has."""

from __future__ import annotations

import os
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from nightfold.ledger.writing import Writer
    from nightfold.session import Session

Where = str | os.PathLike[str]


class Face:
    """A group of verbs of a store; `nightfold.store.Store` has them all."""

    _session: Session
    _writer: Writer
