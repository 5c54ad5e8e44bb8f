"""Whether residuals follow a pattern: they make fewer runs of one sign than chance would."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import groupby

LEVEL = 0.001
"""Share of random orders that may have so few runs before we speak of a pattern."""


@dataclass(frozen=True, slots=True)
class Runs:
    """Runs of signs in a row of residuals.

    Attributes
    ----------
    count : int
        Runs found.
    points : int
        Residuals with a sign.
    expected : float
        Runs to be expected where signs follow each other by chance.
    p : float
        Probability of so few runs or fewer by chance, given how many residuals have each sign.
    """

    count: int
    points: int
    expected: float
    p: float

    @property
    def patterned(self) -> bool:
        """Return whether there are far fewer runs than chance would make."""
        return self.p < LEVEL


def runs_of(residuals: Sequence[float]) -> Runs | None:
    r"""Return the runs of signs of residuals in the order of x; None where all have one sign.

    Parameters
    ----------
    residuals : sequence of float
        Data minus curve; what is not finite or zero has no sign and is left out.

    Notes
    -----
    With m plus and n minus signs in random order, the number of runs has the mean :math:`1 + 2mn/(m+n)` and
    :math:`P(R = 2k) = 2 C(m-1, k-1) C(n-1, k-1) / C(m+n, m)`,
    :math:`P(R = 2k+1) = [C(m-1, k) C(n-1, k-1) + C(m-1, k-1) C(n-1, k)] / C(m+n, m)`.
    A fit makes residuals a little more lively than independent ones, so the test errs on the quiet side.

    References
    ----------
    A. Wald and J. Wolfowitz, Ann. Math. Stat. 11, 147 (1940), doi:10.1214/aoms/1177731909.
    """
    signs = [residual > 0 for residual in residuals if math.isfinite(residual) and residual]
    up = sum(signs)
    down = len(signs) - up
    if not up or not down:
        return None
    count = sum(1 for _ in groupby(signs))
    p = math.fsum(_probability(runs, up, down) for runs in range(2, count + 1))
    return Runs(count, len(signs), 1 + 2 * up * down / len(signs), min(1.0, p))


def _probability(runs: int, up: int, down: int) -> float:
    """Return the probability of so many runs in a random order."""
    half, odd = divmod(runs, 2)
    whole = _log_choices(up + down, up)
    if not odd:
        return 2 * math.exp(_log_choices(up - 1, half - 1) + _log_choices(down - 1, half - 1) - whole)
    more_up = _log_choices(up - 1, half) + _log_choices(down - 1, half - 1)
    more_down = _log_choices(up - 1, half - 1) + _log_choices(down - 1, half)
    return math.exp(more_up - whole) + math.exp(more_down - whole)


def _log_choices(n: int, k: int) -> float:
    """Return ln of the binomial coefficient, -inf where it is zero."""
    if not 0 <= k <= n:
        return -math.inf
    return math.lgamma(n + 1) - math.lgamma(k + 1) - math.lgamma(n - k + 1)
