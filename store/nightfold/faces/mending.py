"""What people put right afterwards, always with a reason and always so that it can be undone."""

from __future__ import annotations

from collections.abc import Sequence

from nightfold.faces.face import Face
from nightfold.ledger import setting_aside


class Mending(Face):
    """Putting right: shots set aside and put back."""

    def set_aside(self, uids: Sequence[str], reason: str, *, by: str | None = None) -> int:
        """Leave shots out of results, with a reason; return how many were not so already.

        Raises
        ------
        NotFound
            If a shot is not in the store.
        ValueError
            If the reason is empty.
        """
        with self._session.writing() as connection:
            return setting_aside.set_shots_aside(connection, uids, reason, by, None)

    def put_back(self, uids: Sequence[str], *, by: str | None = None) -> int:
        """Take shots into results again; return how many were set aside.

        Raises
        ------
        NotFound
            If a shot is not in the store.
        """
        with self._session.writing() as connection:
            return setting_aside.put_shots_back(connection, uids, by)
