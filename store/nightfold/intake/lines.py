"""Lines of a file as bytes, each with its number and offset, in constant memory."""

from __future__ import annotations

import codecs
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import BinaryIO

from nightfold.errors import RecordError

LONGEST_LINE = 16 * 1024 * 1024
"""The longest line that is read, in bytes; of a longer one only the beginning is kept."""

_KEPT_OF_TOO_LONG = 80
_CHUNK = 1024 * 1024
_UTF_16 = (codecs.BOM_UTF16_LE, codecs.BOM_UTF16_BE)


@dataclass(frozen=True, slots=True)
class Line:
    """One line as it stands in the file.

    Attributes
    ----------
    number : int
        Counted from 1.
    byte : int
        Offset of its first byte in the file, a byte order mark not counted in.
    data : bytes
        The line with its line end, without a byte order mark; of a line that is too long, the beginning.
    size : int
        Length of the whole line in bytes.
    """

    number: int
    byte: int
    data: bytes
    size: int

    @property
    def ended(self) -> bool:
        """Whether a line end was there; only the last line of a file can lack it."""
        return self.too_long or self.data.endswith(b"\n")

    @property
    def too_long(self) -> bool:
        """Whether the line exceeds `LONGEST_LINE`, so that `data` holds only its beginning."""
        return self.size > len(self.data)


def read_lines(path: Path, *, start: int = 0, first_line: int = 1) -> Iterator[Line]:
    """Yield the lines of a file, from byte `start` on.

    Parameters
    ----------
    path : Path
        The file.
    start : int
        Offset of the first byte of a line.
    first_line : int
        The number of that line.

    Raises
    ------
    RecordError
        If the file is UTF-16, as its first bytes tell.
    """
    with path.open("rb") as file:
        if start:
            file.seek(start)
        number, byte = first_line, start
        while data := file.readline(LONGEST_LINE):
            size = len(data)
            if size == LONGEST_LINE and not data.endswith(b"\n"):
                size += _skip_rest(file)
                data = data[:_KEPT_OF_TOO_LONG] if size > LONGEST_LINE else data
            shift = 0
            if byte == 0:
                shift = _byte_order_mark(path, data)
            yield Line(number, byte + shift, data[shift:] if shift else data, size - shift)
            number += 1
            byte += size


def _skip_rest(file: BinaryIO) -> int:
    """Return the length of what is left of the current line, reading over it."""
    skipped = 0
    while chunk := file.readline(_CHUNK):
        skipped += len(chunk)
        if chunk.endswith(b"\n"):
            break
    return skipped


def _byte_order_mark(path: Path, data: bytes) -> int:
    """Return the length of the byte order mark that the file starts with."""
    if data.startswith(_UTF_16):
        raise RecordError(str(path), "UTF-16 text", "UTF-8; save or convert the file as UTF-8")
    return len(codecs.BOM_UTF8) if data.startswith(codecs.BOM_UTF8) else 0


def undecodable(line: bytes) -> RecordError | None:
    """Return what is wrong with a line that is not UTF-8, or None for one that is."""
    try:
        line.decode("utf-8")
    except UnicodeDecodeError as error:
        at = error.start
        guess = line[at : at + 1].decode("latin-1")
        after = line[max(0, at - 20) : at].decode("utf-8", errors="replace")
        found = f"byte 0x{line[at]:02x} at offset {at} of the line, after {after!r} ({guess!r} in Latin-1)"
        return RecordError("", found, "UTF-8 text; save the file as UTF-8")
    return None


def too_long(line: Line) -> RecordError:
    """Return the refusal of a line that is too long to be read."""
    limit = LONGEST_LINE // (1024 * 1024)
    start = line.data[:40].decode("utf-8", errors="replace")
    return RecordError(
        "", f"a line of {line.size} bytes that starts {start!r}", f"at most {limit} MiB a line"
    )
