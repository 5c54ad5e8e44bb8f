"""Reader of the NIST StRD files kept as reference."""

from __future__ import annotations

import re
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

FOLDER = Path(__file__).parents[1] / "reference" / "nist_strd"


@dataclass(frozen=True)
class ReferenceSet:
    x: NDArray[np.float64]
    y: NDArray[np.float64]
    starts: tuple[dict[str, float], dict[str, float]]
    value: dict[str, float]
    stderr: dict[str, float]


def read(name: str) -> ReferenceSet:
    lines = (FOLDER / f"{name}.dat").read_text().splitlines()
    rows = [re.match(r"\s+(b\d+) =\s+(.*)", line) for line in lines]
    table = {row[1]: [float(v) for v in row[2].split()] for row in rows if row}
    first, last = next(
        (int(m[1]), int(m[2])) for m in (re.search(r"Data\s+\(lines (\d+) to (\d+)\)", s) for s in lines) if m
    )
    data = np.array([[float(v) for v in line.split()] for line in lines[first - 1 : last]])
    return ReferenceSet(
        data[:, 1],
        data[:, 0],
        ({n: v[0] for n, v in table.items()}, {n: v[1] for n, v in table.items()}),
        {n: v[2] for n, v in table.items()},
        {n: v[3] for n, v in table.items()},
    )
