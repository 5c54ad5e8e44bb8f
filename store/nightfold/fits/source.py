"""Where the data of a fit come from."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from nightfold.ledger.selecting import column_name
from nightfold.scans.relative import shared_errors

if TYPE_CHECKING:
    import pandas as pd
    from numpy.typing import NDArray

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

    def shared(self, table: pd.DataFrame) -> NDArray[np.float64] | None:
        """Return the change of each shot of the table with each error that they share, (n, m); None without any."""
        if self.observable is None or self.relative_to is None:
            return None
        facts, level = table.attrs["references"][self.observable], table.attrs["levels"][self.observable]
        return shared_errors(
            table["started"].dt.tz_localize(None).to_numpy("datetime64[us]").astype(np.int64) / 1e6,
            np.array(facts["started_us"], dtype=np.int64) / 1e6,
            np.array(facts["stderr"], dtype=np.float64),
            self.reference_within,
            table[column_name(self.observable)].to_numpy(np.float64),
            table[column_name(level)].to_numpy(np.float64),
        )


PLAIN = Source()
