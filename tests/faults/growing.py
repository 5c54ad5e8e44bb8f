"""A process that takes a growing stream record by record; run by the tests, and killed by them."""

from __future__ import annotations

import json
import sys
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

from nightfold.opening import open_store


def follow(path: Path) -> Iterator[dict[str, Any]]:
    """Yield the records of a file that grows, until a line says that it has ended."""
    with path.open("rb") as file:
        kept = b""
        while True:
            kept += file.readline()
            if not kept.endswith(b"\n"):
                time.sleep(0.001)
                continue
            record = json.loads(kept)
            kept = b""
            if record == {}:
                return
            yield record


def main(place: str, stream: str, mode: str) -> None:
    """Take one record after the other, telling each uid once it is safe."""
    with open_store(place) as store:
        if mode == "whole":
            store.take_file(stream, progress=lambda byte: print(byte, flush=True))
            return
        for record in follow(Path(stream)):
            outcome = store.take([record])
            assert not outcome.refused
            print(record["uid"], flush=True)


if __name__ == "__main__":
    main(*sys.argv[1:])
