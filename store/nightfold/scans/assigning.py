"""Which scan a shot belongs to: labels with their rounds, and folding of the unlabelled rest, kept in the store."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

from sqlalchemy import Connection

from nightfold.ledger.cards import newest_cards, stored_card
from nightfold.ledger.checking import CheckedShot
from nightfold.scans import refolding, rounds
from nightfold.scans.keeping import settle_axes
from nightfold.scans.rounds import Round

DEFAULT_REJOIN_US = 86_400_000_000


@dataclass(slots=True)
class ScanFolder:
    """Places labelled shots as they come, folds unlabelled ones, and folds again when shots come late."""

    _newest: dict[tuple[int, str], Round] = field(default_factory=dict)
    _touched: dict[tuple[int, str], dict[int, Round]] = field(default_factory=dict)
    _rejoin_us: dict[int, int] | None = None

    def forget(self) -> None:
        """Drop what is remembered of the store."""
        self._newest.clear()
        self._touched.clear()
        self._rejoin_us = None

    def place(self, connection: Connection, shots: Sequence[CheckedShot]) -> None:
        """Give labelled shots their scan: the newest round of the label, or a new one."""
        for shot in sorted(shots, key=lambda item: item.started_us):
            if shot.wish.label is None or shot.reference:
                continue
            key = (shot.sequence_id, shot.wish.label)
            current = self._newest.get(key) or rounds.newest_round(connection, *key)
            swept = _swept_ids(shot)
            if current is None or not current.takes(shot.started_us, swept, self.rejoin_us(connection, shot)):
                current = rounds.open_round(connection, *key, shot.started_us, swept)
            current.add(shot.started_us, swept, shot.wish.planned_shots, shot.wish.last)
            current.watch_settings(shot.set_digest, shot.moving)
            self._newest[key] = current
            self._touched.setdefault(key, {})[current.scan_id] = current
            shot.scan_id = current.scan_id

    def fold(self, connection: Connection, shots: Sequence[CheckedShot]) -> None:
        """Fold the streams of the shots just written, and labels to which shots came late."""
        labelled: dict[tuple[int, str], list[CheckedShot]] = {}
        free: dict[int, list[int]] = {}
        for shot in shots:
            if shot.reference:
                continue
            if shot.wish.label is None:
                free.setdefault(shot.sequence_id, []).append(shot.started_us)
            else:
                labelled.setdefault((shot.sequence_id, shot.wish.label), []).append(shot)
        for key, members in labelled.items():
            touched = self._touched.pop(key)
            for current in touched.values():
                rounds.save_progress(connection, current)
            if any(current.late for current in touched.values()):
                fresh = {shot.id for shot in members}
                rounds.fold_label(connection, *key, self.rejoin_us(connection, members[0]), fresh)
                del self._newest[key]
                continue
            for current in touched.values():
                if current.unsettled or current is not self._newest[key]:
                    settle_axes(connection, current.scan_id, current.swept)
                    current.settled_at = current.shots
        for sequence_id, started in free.items():
            refolding.fold_span(connection, sequence_id, min(started), max(started))

    def rejoin_us(self, connection: Connection, shot: CheckedShot) -> int:
        """Return for how long after its last shot a label still resumes its round."""
        if self._rejoin_us is None:
            self._rejoin_us = rejoin_times(connection)
        return self._rejoin_us.get(shot.machine.id, DEFAULT_REJOIN_US)


def rejoin_times(connection: Connection) -> dict[int, int]:
    """Return for how long after its last shot a label still resumes its round, by machine, where a card says so."""
    cards = {machine: stored_card(toml) for machine, toml in newest_cards(connection).items()}
    return {machine: int(card.rejoin_within_s * 1e6) for machine, card in cards.items()}


def _swept_ids(shot: CheckedShot) -> tuple[int, ...]:
    return tuple(shot.machine.parameters[name].id or 0 for name in shot.wish.swept)
