"""Notes in words."""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

from nightfold_cli.opening import records

if TYPE_CHECKING:
    from nightfold.ledger.notes import Note
    from nightfold.store import Store
    from nightfold_cli.render import Screen

_FIRST = 60


def about(note: Note) -> str:
    """Return what a note is about: ``shot heron-0003``, ``night Mon 2026-10-05 of heron``."""
    if note.kind != "night":
        return f"{note.kind} {note.about}"
    return f"night {note.about} of {note.machine}"


def entry(note: Note | Mapping[str, Any]) -> dict[str, Any]:
    """Return a note for JSON."""
    names = ("at", "by", "kind", "about", "machine", "text")
    if isinstance(note, Mapping):
        return {name: note[name] for name in names}
    return {name: getattr(note, name) for name in names}


def texts_by_subject(store: Store) -> dict[str, list[str]]:
    """Return the texts of all notes, by the subject as the store names it (``scan 3``)."""
    found: dict[str, list[str]] = defaultdict(list)
    for note in records(store.notes()):
        found[note["subject"]].append(note["text"])
    return found


def notes_of_fits(store: Store, fits: Sequence[int]) -> dict[int, list[str]]:
    """Return the texts of the notes on fits, by id; those on fits that one replaced are among its own."""
    if not any(subject.startswith("fit ") for subject in texts_by_subject(store)):
        return {}
    return {fit: store.notes(fit=fit)["text"].tolist() for fit in fits}


def note_fields(texts: Sequence[str], screen: Screen) -> list[tuple[str, str]]:
    """Return notes as fields: a line each on a screen, a note each in a pipe."""
    if not screen.terminal:
        return [("note", text) for text in texts]
    return [
        ("" if line else "note", part) for text in texts for line, part in enumerate(text.split("\n")) if part
    ]


def first_words(texts: list[str]) -> str:
    """Return the notes on one line, cut where they are long."""
    whole = "; ".join(" ".join(text.split()) for text in texts)
    return whole if len(whole) <= _FIRST else whole[: _FIRST - 1].rstrip() + "…"
