"""Records in batches: each one transaction, so that a live source is stored at once and a file in large pieces."""

from __future__ import annotations

import gc
import time
from collections.abc import Iterable, Iterator, Sequence
from contextlib import contextmanager

from nightfold.ledger.outcome import Incoming

BATCH = 500
PATIENCE_S = 0.02


def batches(records: Iterable[Incoming], most: int = BATCH) -> Iterator[Sequence[Incoming]]:
    """Yield the records in batches that double up to `most`, and at once whatever there is when one was waited for."""
    stream, size, batch = iter(records), 1, list[Incoming]()
    while True:
        asked = time.monotonic()
        item = next(stream, None)
        waited = time.monotonic() - asked > PATIENCE_S
        if item is not None:
            batch.append(item)
        if batch and (item is None or waited or len(batch) >= size):
            yield batch
            size, batch = (1 if waited else min(2 * size, most)), []
        if item is None:
            return


@contextmanager
def collector_paused() -> Iterator[None]:
    """Spare a batch the search for reference cycles: it makes none, and thousands of records cost a quarter more."""
    was_on = gc.isenabled()
    gc.disable()
    try:
        yield
    finally:
        if was_on:
            gc.enable()
