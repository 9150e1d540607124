"""The compact form in which a run's counter readings are kept: exact, a fraction of a byte to a byte a sample.

Layout, all numbers little-endian:

=========  =====  ===============================================================================================
offset     bytes  content
=========  =====  ===============================================================================================
0          1      version of this layout, 1
1          1      form of the times: 1 whole microseconds, 0 the bit patterns of IEEE 754 doubles in seconds
2          4      number of samples n, unsigned
6          3      bytes an entry (1 to 8) of the three streams: times, left counts, right counts
9          rest   zlib stream of the three streams, one after the other
=========  =====  ===============================================================================================

A stream is its n numbers as 64-bit integers, differenced twice (modulo 2^64, starting from zeros), each difference
folded to unsigned (0, -1, 1, -2 become 0, 1, 2, 3) and written byte plane by byte plane: all lowest bytes, then all
second bytes, and so on. A vehicle's speed changes little from one sample to the next, so nearly all of it is small
numbers in the lowest plane.
"""

from __future__ import annotations

import hashlib
import struct
import zlib
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

VERSION = 1
_HEADER = struct.Struct("<BBI3B")
_MICROSECONDS, _DOUBLES = 1, 0


@dataclass(frozen=True)
class Counts:
    """Counter readings of a run: times in seconds from its start and the two counters, all of shape (n,)."""

    time_s: NDArray[np.float64]
    left: NDArray[np.int64]
    right: NDArray[np.int64]


def encode(time_s: ArrayLike, left: ArrayLike, right: ArrayLike) -> bytes:
    """Pack the readings of a run.

    Parameters
    ----------
    time_s, left, right : array_like, shape (n,)
        Times in seconds (finite) and counter readings (whole numbers of up to 63 bits).

    Raises
    ------
    ValueError
        The three are not of one length, or a time is not finite, or a reading is not whole.
    """
    times = np.ascontiguousarray(time_s, dtype=np.float64)
    sides = [_whole(left), _whole(right)]
    if times.ndim != 1 or any(side.shape != times.shape for side in sides):
        raise ValueError("times and readings must be three rows of one length")
    if not np.isfinite(times).all():
        raise ValueError("a time is not a finite number")
    form, stamps = _stamps(times)
    packed = [_pack(stream) for stream in (stamps, *sides)]
    header = _HEADER.pack(VERSION, form, times.size, *(width for width, _ in packed))
    return header + zlib.compress(b"".join(planes for _, planes in packed), 6)


def decode(blob: bytes) -> Counts:
    """Unpack the readings of a run, bit for bit as they were packed.

    Raises
    ------
    ValueError
        The bytes are not of this layout.
    """
    try:
        version, form, n, *widths = _HEADER.unpack_from(blob)
        if version != VERSION or form not in (_MICROSECONDS, _DOUBLES):
            raise ValueError(f"counts of layout {version}, form {form}, are not known to this program")
        data = zlib.decompress(blob[_HEADER.size :])
    except (struct.error, zlib.error) as error:
        raise ValueError(f"the stored counts are damaged: {error}") from error
    if len(data) != n * sum(widths):
        raise ValueError("the stored counts are damaged: their length is wrong")
    streams, start = [], 0
    for width in widths:
        streams.append(_unpack(data[start : start + n * width], width))
        start += n * width
    times = streams[0] / 1e6 if form == _MICROSECONDS else streams[0].view(np.float64)
    return Counts(time_s=times, left=streams[1], right=streams[2])


def counts_digest(blob: bytes) -> str:
    """Lower-case hex SHA-256 of the packed readings."""
    return hashlib.sha256(blob).hexdigest()


def _whole(readings: ArrayLike) -> NDArray[np.int64]:
    array = np.asarray(readings)
    if array.size and array.dtype.kind not in "iu":
        raise ValueError("a counter reading is not a whole number")
    return np.ascontiguousarray(array, dtype=np.int64)


def _stamps(times: NDArray[np.float64]) -> tuple[int, NDArray[np.int64]]:
    """Times as integers: microseconds when that loses nothing, else their bit patterns."""
    if times.size == 0 or np.abs(times).max() < 2.0**52 / 1e6:
        whole = np.rint(times * 1e6)
        # Compared as bit patterns, so that a negative zero survives too.
        if np.array_equal((whole.astype(np.int64) / 1e6).view(np.int64), times.view(np.int64)):
            return _MICROSECONDS, whole.astype(np.int64)
    return _DOUBLES, times.view(np.int64)


def _pack(stream: NDArray[np.int64]) -> tuple[int, bytes]:
    second = np.diff(stream, n=2, prepend=np.zeros(2, dtype=np.int64))
    folded = ((second << 1) ^ (second >> 63)).view(np.uint64)
    largest = int(folded.max()) if folded.size else 0
    width = max(1, (largest.bit_length() + 7) // 8)
    planes = folded.astype("<u8").view(np.uint8).reshape(-1, 8)[:, :width].T
    return width, planes.tobytes()


def _unpack(planes: bytes, width: int) -> NDArray[np.int64]:
    n = len(planes) // width
    wide = np.zeros((n, 8), dtype=np.uint8)
    wide[:, :width] = np.frombuffer(planes, dtype=np.uint8).reshape(width, n).T
    folded = wide.reshape(-1).view("<u8").astype(np.uint64)
    second = (folded >> np.uint64(1)).view(np.int64) ^ -((folded & np.uint64(1)).view(np.int64))
    return np.cumsum(np.cumsum(second, dtype=np.int64), dtype=np.int64)
