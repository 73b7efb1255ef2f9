"""Several arrays under names as one blob: checkpoints, and the arrays of a model revision.

Layout: ``NARR1``, the length of the header as 8 bytes little-endian, the header as JSON ``[[name, kind,
shape], ...]`` in ASCII, then each array's elements in C order, little-endian, one after the other.
"""

from __future__ import annotations

import json
import math
from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from softsensor.errors import RecordsError

MARK = b"NARR1"
KINDS = ("<f8", "<i8", "<i4", "|i1", "|u1", "|b1")


def pack_arrays(arrays: Mapping[str, NDArray[Any]]) -> bytes:
    """One blob, the same for the same arrays in the same order, bit for bit.

    :raises RecordsError: an element type other than float64, int64, int32, int8, uint8 and bool.
    """
    header: list[list[Any]] = []
    parts: list[bytes] = []
    for name, array in arrays.items():
        kind = array.dtype.newbyteorder("<")
        if kind.str not in KINDS:
            raise RecordsError(f"the array {name} of {array.dtype} cannot be stored")
        header.append([name, kind.str, list(array.shape)])
        parts.append(array.astype(kind, copy=False).tobytes())
    text = json.dumps(header, separators=(",", ":")).encode("ascii")
    return b"".join([MARK, len(text).to_bytes(8, "little"), text, *parts])


def unpack_arrays(blob: bytes) -> dict[str, NDArray[Any]]:
    """The arrays of a blob, in order; C-contiguous, writable, in this machine's byte order.

    :raises RecordsError: the blob is damaged or not one of these.
    """
    start = len(MARK) + 8
    if blob[: len(MARK)] != MARK or len(blob) < start:
        raise RecordsError("a stored set of arrays is damaged, or from a newer release")
    end = start + int.from_bytes(blob[len(MARK) : start], "little")
    arrays: dict[str, NDArray[Any]] = {}
    try:
        for name, kind, shape in json.loads(blob[start:end]):
            if kind not in KINDS:
                raise ValueError(kind)
            count = math.prod(shape)
            array = np.frombuffer(blob, dtype=kind, count=count, offset=end).reshape(shape)
            arrays[name] = array.astype(array.dtype.newbyteorder("="), copy=True)
            end += count * array.dtype.itemsize
    except (ValueError, TypeError) as error:
        raise RecordsError(f"a stored set of arrays is damaged: {error}") from None
    if end != len(blob):
        raise RecordsError(f"a stored set of arrays is damaged: {len(blob)} bytes, expected {end}")
    return arrays
