"""Vectors as bytes, bit for bit: nan, its payload and -0.0 come back as they went in, on any machine."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from softsensor.errors import RecordsError

Floats = NDArray[np.float64]
Codes = NDArray[np.int8]


def pack(array: NDArray[np.float64] | NDArray[np.int8] | NDArray[np.uint8]) -> bytes:
    """An array's elements in C order: float64 as little-endian IEEE 754, int8 and uint8 as they are.

    :raises RecordsError: another type of element; nothing is converted silently.

    >>> pack(np.array([1.0, -0.0])).hex()
    '000000000000f03f0000000000000080'
    """
    if array.dtype.newbyteorder("=") == np.float64:
        return array.astype("<f8", copy=False).tobytes()
    if array.dtype in (np.int8, np.uint8):
        return array.tobytes()
    raise RecordsError(f"a vector of {array.dtype} cannot be stored; expected float64, int8 or uint8")


def unpack(blob: bytes, width: int | None = None) -> Floats:
    """The float64 vector, or (rows, width) matrix, in ``blob``; writable, in this machine's byte order.

    :raises RecordsError: the blob's length does not fit.
    """
    return _shaped(blob, np.dtype("<f8"), width).astype(np.float64, copy=True)


def unpack_codes(blob: bytes, width: int | None = None) -> Codes:
    """The int8 vector, or (rows, width) matrix, in ``blob``; writable.

    :raises RecordsError: the blob's length does not fit.
    """
    return _shaped(blob, np.dtype(np.int8), width).astype(np.int8, copy=True)


def stack(blobs: Sequence[bytes]) -> Floats:
    """(rows, width) from one blob a row, all of one width.

    :raises RecordsError: the rows differ in width.
    """
    return unpack(b"".join(blobs), _width(blobs) // 8).reshape(len(blobs), -1)


def stack_codes(blobs: Sequence[bytes]) -> Codes:
    """(rows, width) of int8 from one blob a row, all of one width.

    :raises RecordsError: the rows differ in width.
    """
    return unpack_codes(b"".join(blobs), _width(blobs)).reshape(len(blobs), -1)


def _width(blobs: Sequence[bytes]) -> int:
    widths = {len(blob) for blob in blobs}
    if len(widths) > 1:
        raise RecordsError(f"stored vectors that belong together differ in length: {sorted(widths)} bytes")
    return widths.pop() if widths else 0


def _shaped(blob: bytes, kind: np.dtype[np.generic], width: int | None) -> NDArray[np.generic]:
    row = kind.itemsize * (1 if width is None else max(width, 1))
    if len(blob) % row:
        raise RecordsError(f"a stored vector of {len(blob)} bytes is damaged; expected a multiple of {row}")
    flat = np.frombuffer(blob, dtype=kind)
    return flat if width is None or width == 0 else flat.reshape(-1, width)
