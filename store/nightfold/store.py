"""The store as people use it: hand over records, read shots and scans, fit (`nightfold.opening` opens one)."""

from __future__ import annotations

from types import TracebackType
from typing import Self

from nightfold import session
from nightfold.faces.asking import Asking
from nightfold.faces.face import Where
from nightfold.faces.mending import Mending
from nightfold.faces.scanning import Scanning
from nightfold.faces.sensing import Sensing
from nightfold.faces.taking import Taking
from nightfold.ledger.writing import Writer
from nightfold.scans.assigning import ScanFolder

__all__ = ["Store", "Where"]


class Store(Taking, Asking, Scanning, Mending, Sensing):
    """An open store; a context manager that gives its connections back at the end.

    Made by `open_store`. Every method is one transaction, or, where records are taken, one a batch. The methods stand
    in `nightfold.faces`.
    """

    def __init__(self, opened: session.Session) -> None:
        self._session = opened
        self._writer = Writer(opened, ScanFolder())

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, value: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def close(self) -> None:
        """Give back every connection; the store must not be used afterwards."""
        self._session.close()

    @property
    def where(self) -> str:
        """The file or database, as shown to people (without a password)."""
        return str(self._session.place)
