"""Where the data of a fit come from."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    import pandas as pd

    from nightfold.scans.scan import Scan


@dataclass(frozen=True, slots=True)
class Source:
    """Where the data of a fit come from: the readings of a scan, or one of them relative to reference shots."""

    observable: str | None = None
    relative_to: str | None = None
    reference_within: float = 0.0

    @property
    def settings(self) -> dict[str, Any]:
        """What a kept fit must remember of it; nothing for plain readings."""
        if self.relative_to is None:
            return {}
        return {"relative_to": self.relative_to, "reference_within": self.reference_within}

    def read(self, scan: Scan) -> pd.DataFrame:
        """Return the scan's table with the shots set aside.

        Raises
        ------
        NotFound
            As in `Scan.table`.
        """
        if self.observable is None:
            return scan.table(set_aside=True)
        return scan.table(
            set_aside=True,
            observables=[self.observable],
            relative_to=self.relative_to,
            reference_within=self.reference_within,
        )


PLAIN = Source()
