"""The NIST StRD sets for nonlinear least squares: their files, their models, and digits of agreement.

Source and licence: tests/reference/nist_strd/SOURCE.md.
"""

from __future__ import annotations

import re
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy import arctan, cos, exp, pi, sin
from numpy.typing import NDArray

FOLDER = Path(__file__).parents[1] / "reference" / "nist_strd"
MOST_DIGITS = 11
"""The certificates print eleven digits."""


@dataclass(frozen=True)
class ReferenceSet:
    """A set with its certificate; ``columns`` holds the independent variables, ``x`` is the first of them."""

    x: NDArray[np.float64]
    y: NDArray[np.float64]
    columns: NDArray[np.float64]
    starts: tuple[dict[str, float], dict[str, float]]
    value: dict[str, float]
    stderr: dict[str, float]


def read(name: str) -> ReferenceSet:
    """Return a set as its file has it."""
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
        data[:, 1:].T,
        ({n: v[0] for n, v in table.items()}, {n: v[1] for n, v in table.items()}),
        {n: v[2] for n, v in table.items()},
        {n: v[3] for n, v in table.items()},
    )


def problem(name: str) -> tuple[ReferenceSet, Callable[..., Any]]:
    """Return a set ready to be fitted with its function of x and the parameters.

    Nelson has two independent variables and a logarithm on the left: there x is the number of the row.
    """
    one = read(name)
    if name != "Nelson":
        return one, FUNCTIONS[name]
    weeks, degrees = one.columns
    rows = np.arange(len(one.y), dtype=np.float64)

    def nelson(x: Any, b1: Any, b2: Any, b3: Any) -> Any:
        row = np.asarray(x, dtype=np.intp)
        return b1 - b2 * weeks[row] * exp(-b3 * degrees[row])

    return ReferenceSet(rows, np.log(one.y), one.columns, one.starts, one.value, one.stderr), nelson


def digits(found: dict[str, float], certified: dict[str, float]) -> float:
    """Return the digits that the worst parameter agrees to, -log10 of its relative error; 0 for none."""
    worst = max(abs(found[n] - wanted) / abs(wanted) for n, wanted in certified.items())
    if not np.isfinite(worst):
        return 0.0
    return float(np.clip(-np.log10(max(worst, 1e-300)), 0.0, MOST_DIGITS))


def _decay(x: Any, b1: Any, b2: Any) -> Any:
    return b1 * (1 - exp(-b2 * x))


def _chwirut(x: Any, b1: Any, b2: Any, b3: Any) -> Any:
    return exp(-b1 * x) / (b2 + b3 * x)


def _gauss(x: Any, b1: Any, b2: Any, b3: Any, b4: Any, b5: Any, b6: Any, b7: Any, b8: Any) -> Any:
    peaks = b3 * exp(-((x - b4) ** 2) / b5**2) + b6 * exp(-((x - b7) ** 2) / b8**2)
    return b1 * exp(-b2 * x) + peaks


def _lanczos(x: Any, b1: Any, b2: Any, b3: Any, b4: Any, b5: Any, b6: Any) -> Any:
    return b1 * exp(-b2 * x) + b3 * exp(-b4 * x) + b5 * exp(-b6 * x)


def _cubics(x: Any, b1: Any, b2: Any, b3: Any, b4: Any, b5: Any, b6: Any, b7: Any) -> Any:
    return (b1 + b2 * x + b3 * x**2 + b4 * x**3) / (1 + b5 * x + b6 * x**2 + b7 * x**3)


def _enso(x: Any, b1: Any, b2: Any, b3: Any, b4: Any, b5: Any, b6: Any, b7: Any, b8: Any, b9: Any) -> Any:
    year = b1 + b2 * cos(2 * pi * x / 12) + b3 * sin(2 * pi * x / 12)
    slow = b5 * cos(2 * pi * x / b4) + b6 * sin(2 * pi * x / b4)
    return year + slow + b8 * cos(2 * pi * x / b7) + b9 * sin(2 * pi * x / b7)


FUNCTIONS: dict[str, Callable[..., Any]] = {
    "Bennett5": lambda x, b1, b2, b3: b1 * (b2 + x) ** (-1 / b3),
    "BoxBOD": _decay,
    "Chwirut1": _chwirut,
    "Chwirut2": _chwirut,
    "DanWood": lambda x, b1, b2: b1 * x**b2,
    "ENSO": _enso,
    "Eckerle4": lambda x, b1, b2, b3: b1 / b2 * exp(-0.5 * ((x - b3) / b2) ** 2),
    "Gauss1": _gauss,
    "Gauss2": _gauss,
    "Gauss3": _gauss,
    "Hahn1": _cubics,
    "Kirby2": lambda x, b1, b2, b3, b4, b5: (b1 + b2 * x + b3 * x**2) / (1 + b4 * x + b5 * x**2),
    "Lanczos1": _lanczos,
    "Lanczos2": _lanczos,
    "Lanczos3": _lanczos,
    "MGH09": lambda x, b1, b2, b3, b4: b1 * (x**2 + b2 * x) / (x**2 + b3 * x + b4),
    "MGH10": lambda x, b1, b2, b3: b1 * exp(b2 / (x + b3)),
    "MGH17": lambda x, b1, b2, b3, b4, b5: b1 + b2 * exp(-b4 * x) + b3 * exp(-b5 * x),
    "Misra1a": _decay,
    "Misra1b": lambda x, b1, b2: b1 * (1 - (1 + b2 * x / 2) ** -2.0),
    "Misra1c": lambda x, b1, b2: b1 * (1 - (1 + 2 * b2 * x) ** -0.5),
    "Misra1d": lambda x, b1, b2: b1 * b2 * x / (1 + b2 * x),
    "Rat42": lambda x, b1, b2, b3: b1 / (1 + exp(b2 - b3 * x)),
    "Rat43": lambda x, b1, b2, b3, b4: b1 / (1 + exp(b2 - b3 * x)) ** (1 / b4),
    "Roszman1": lambda x, b1, b2, b3, b4: b1 - b2 * x - arctan(b3 / (x - b4)) / pi,
    "Thurber": _cubics,
}
NAMES = sorted([*FUNCTIONS, "Nelson"])
