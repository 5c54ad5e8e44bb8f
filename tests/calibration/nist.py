"""Functions of one's own against the NIST StRD certificates: ``python tests/calibration/nist.py``.

Prints, as the table of docs/nist.md, to how many digits the worst value and the worst standard deviation of each set
agree with the certificate, from both starts, by ordinary least squares (equal weights, no robust step).
"""

from __future__ import annotations

import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parents[2]))

from tests.fits.strd import NAMES, digits, problem

from nightfold import Model, fit_curve

ENOUGH_VALUE, ENOUGH_STDERR = 6.0, 4.0
NOTES = {
    "Lanczos1": "residuals of 1e-13 are the rounding of y: their size is certified below double precision",
    "Nelson": "two independent variables; log(y) is fitted",
}


def row(name: str, start: int) -> tuple[float, float, str]:
    """Return the digits of values and standard deviations, and what is to be said of them."""
    certified, function = problem(name)
    found = fit_curve(
        certified.x,
        certified.y,
        Model(function),
        start=certified.starts[start],
        weights="equal",
        robust=False,
    )
    value = digits({n: e.value for n, e in found.estimates.items()}, certified.value)
    stderr = digits({n: e.stderr for n, e in found.estimates.items()}, certified.stderr)
    said = [NOTES[name]] if name in NOTES else []
    if found.warnings:
        said.append("warns: " + ", ".join(warning.code for warning in found.warnings))
    return value, stderr, "; ".join(said)


def main() -> None:
    """Print the table and how many sets reach the digits wanted."""
    print("| set | start | digits of values | digits of standard deviations | note |")
    print("|---|---|---|---|---|")
    values = stderrs = 0
    for name in NAMES:
        for start in (0, 1):
            value, stderr, note = row(name, start)
            values += value >= ENOUGH_VALUE
            stderrs += stderr >= ENOUGH_STDERR
            print(f"| {name} | {start + 1} | {value:.1f} | {stderr:.1f} | {note} |")
    total = 2 * len(NAMES)
    print(f"\n{values} of {total} reach {ENOUGH_VALUE:.0f} digits of the values, ", end="")
    print(f"{stderrs} of {total} {ENOUGH_STDERR:.0f} of the standard deviations.")


if __name__ == "__main__":
    main()
