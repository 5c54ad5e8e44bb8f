"""Names in a store at a glance, for completion in a shell: in a moment, without SQLAlchemy, and never an error.

What goes wrong, from a store that is not there to a server that does not answer, makes an empty list.
"""

from __future__ import annotations

TYPE_CHECKING = False
if TYPE_CHECKING:  # the real one costs the import of typing
    from collections.abc import Sequence
    from typing import Any

_WAIT_S = 0.3
_SERVER_WAIT_S = 1
_SCANS = (
    "SELECT s.id, s.label, s.round, s.sequence_id, q.name FROM scan s JOIN sequence q ON q.id = s.sequence_id"
    " WHERE EXISTS (SELECT 1 FROM shot WHERE shot.scan_id = s.id) ORDER BY s.id DESC"
)
_QUERIES = {
    "machines": "SELECT DISTINCT name FROM machine ORDER BY name",
    "sequences": "SELECT DISTINCT name FROM sequence ORDER BY name",
    "observables": "SELECT DISTINCT name FROM observable ORDER BY name",
    "parameters": "SELECT DISTINCT name FROM parameter ORDER BY name",
    "axes": (
        "SELECT DISTINCT p.name FROM parameter p JOIN scan_axis a ON a.parameter_id = p.id ORDER BY p.name"
    ),
    "sensors": "SELECT DISTINCT name FROM sensor ORDER BY name",
}
KINDS = (*_QUERIES, "scans")


def names_in_store(where: str, kind: str) -> list[tuple[str, str]]:
    """Return names in a store, each with a word about it; none where they cannot be read at once.

    Parameters
    ----------
    where : str
        A path or a PostgreSQL URL, as for `open_store`.
    kind : {'machines', 'sequences', 'observables', 'parameters', 'axes', 'sensors', 'scans'}
        ``axes`` are the parameters that were swept. Scans come as labels, as ``label#round`` and as ids, the newest
        first; a label of several sequences names no scan and is left out.
    """
    try:
        if kind == "scans":
            return _scan_keys(_read(where, _SCANS))
        return [(str(row[0]), "") for row in _read(where, _QUERIES[kind])]
    except Exception:  # whatever it is, a person who pressed the tab key must not see it
        return []


def _read(where: str, query: str) -> Sequence[Any]:
    """Return the rows of a query; the store is not written to."""
    if "://" in where:
        import psycopg

        head, _, rest = where.partition("://")
        url = f"{head.partition('+')[0]}://{rest}"
        with psycopg.connect(url, connect_timeout=_SERVER_WAIT_S) as server:
            return list(server.execute(query.encode()))
    import sqlite3
    from pathlib import Path

    place = f"{Path(where).absolute().as_uri()}?mode=ro"
    file = sqlite3.connect(place, uri=True, timeout=_WAIT_S)
    try:
        return file.execute(query).fetchall()
    finally:
        file.close()


def _scan_keys(rows: Sequence[Any]) -> list[tuple[str, str]]:
    """Return what names the scans: of rows with id, label, round, sequence id and sequence, the newest first."""
    users: dict[str, set[int]] = {}
    rounds: dict[str, int] = {}
    for _, label, _, sequence_id, _ in rows:
        if label is not None:
            users.setdefault(label, set()).add(sequence_id)
            rounds[label] = rounds.get(label, 0) + 1
    labels: dict[str, str] = {}
    keys: list[tuple[str, str]] = []
    for number, label, turn, _, sequence in rows:
        said = sequence
        if label is not None:
            said = f"{sequence}, {label}#{turn}"
            if len(users[label]) == 1:
                several = f", {rounds[label]} rounds" if rounds[label] > 1 else ""
                labels.setdefault(label, sequence + several)
                keys.append((f"{label}#{turn}", sequence))
        keys.append((str(number), said))
    return [*labels.items(), *keys]
