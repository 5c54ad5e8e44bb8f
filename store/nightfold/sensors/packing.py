"""The readings of one sensor in one hour, packed into bytes and back, exactly.

Layout, little-endian: a head of 38 bytes (format, how the values are kept, count, how many are finite, their lowest,
sum and highest), then one zlib stream. In it the differences of the offsets as uint32, byte-shuffled (all lowest
bytes first, and so on, so that like stands beside like), then the values: as float64, byte-shuffled; or, where a
sensor shows few different ones as every converter with finite steps does, each once and a code per reading.
The head tells lowest, mean and highest of an hour without unpacking it.
"""

from __future__ import annotations

import struct
import zlib
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

HOUR_US = 3_600_000_000
_FORMAT = 1
_SHUFFLED, _CODED = 0, 1
_HEAD = struct.Struct("<BBIIddd")
HEAD_BYTES = _HEAD.size
_LEVEL = 6
_MOST_CODES = 65536

Offsets = NDArray[np.uint32]
Values = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Head:
    """What stands in front of a packed hour.

    Attributes
    ----------
    n : int
        How many readings there are.
    finite : int
        How many of them are finite.
    low, total, high : float
        Lowest, sum and highest of the finite ones; nan, 0 and nan where there are none.
    """

    n: int
    finite: int
    low: float
    total: float
    high: float


def pack(offsets: Offsets, values: Values) -> bytes:
    """Return readings as bytes.

    Parameters
    ----------
    offsets : (n,) uint32 array, microseconds since the hour began
        Rising, all different.
    values : (n,) float array
        NaN and infinities included; kept bit for bit.
    """
    steps = np.diff(offsets, prepend=np.uint32(0)).astype("<u4")
    values = np.ascontiguousarray(values, dtype="<f8")
    bits, codes = np.unique(values.view("<u8"), return_inverse=True)
    coded = len(bits) <= min(_MOST_CODES, len(values) // 2)
    if coded:
        small = codes.astype("<u1" if len(bits) <= 256 else "<u2")
        body = [struct.pack("<I", len(bits)), _shuffle(bits), _shuffle(small)]
    else:
        body = [_shuffle(values)]
    finite = values[np.isfinite(values)]
    low, high = (float(finite.min()), float(finite.max())) if len(finite) else (np.nan, np.nan)
    with np.errstate(over="ignore"):
        total = float(finite.sum())
    kind = _CODED if coded else _SHUFFLED
    head = _HEAD.pack(_FORMAT, kind, len(values), len(finite), low, total, high)
    return head + zlib.compress(b"".join([_shuffle(steps), *body]), _LEVEL)


def unpack(packed: bytes) -> tuple[Offsets, Values]:
    """Return offsets and values of packed readings.

    Raises
    ------
    ValueError
        If the bytes are not what `pack` makes.
    """
    kind, n = _kind_and_count(packed)
    try:
        data = zlib.decompress(packed[HEAD_BYTES:])
    except zlib.error as problem:
        raise ValueError(f"packed readings are damaged ({problem})") from None
    steps, rest = _unshuffle(data[: 4 * n], "<u4"), data[4 * n :]
    if kind == _SHUFFLED:
        values = _unshuffle(rest, "<f8")
    else:
        (many,) = struct.unpack("<I", rest[:4])
        bits = _unshuffle(rest[4 : 4 + 8 * many], "<u8")
        values = bits[_unshuffle(rest[4 + 8 * many :], "<u1" if many <= 256 else "<u2")].view("<f8")
    if not len(values) == len(steps) == n:
        raise ValueError(f"packed readings are damaged ({len(values)} values, wanted {n})")
    return np.cumsum(steps, dtype=np.uint32), values.astype(np.float64, copy=False)


def read_head(packed: bytes) -> Head:
    """Return the head of packed readings; their first `HEAD_BYTES` bytes are enough.

    Raises
    ------
    ValueError
        If the bytes are not what `pack` makes.
    """
    _kind_and_count(packed)
    _, _, n, finite, low, total, high = _HEAD.unpack_from(packed)
    return Head(n, finite, low, total, high)


def _kind_and_count(packed: bytes) -> tuple[int, int]:
    if len(packed) < HEAD_BYTES or packed[0] != _FORMAT or packed[1] not in (_SHUFFLED, _CODED):
        raise ValueError(f"packed readings of format {packed[:2].hex() or 'none'}, wanted {_FORMAT:02x}")
    return packed[1], _HEAD.unpack_from(packed)[2]


def _shuffle(numbers: NDArray[np.generic]) -> bytes:
    """Return the first byte of every number, then the second of every number, and so on."""
    return numbers.view(np.uint8).reshape(-1, numbers.itemsize).T.tobytes()


def _unshuffle(data: bytes, kind: str) -> NDArray[np.generic]:
    """Return the numbers that `_shuffle` took apart."""
    size = np.dtype(kind).itemsize
    whole = np.frombuffer(data, dtype=np.uint8).reshape(size, -1)
    return np.ascontiguousarray(whole.T).view(kind).reshape(-1)
