"""Qualities in a table: Good, Uncertain, Bad, or OPC UA status codes, of which the top two bits decide."""

from __future__ import annotations

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from connectors.readings import Quality
from connectors.table import Table

EXPECTED = "expected Good, Uncertain, Bad or an OPC UA status code such as 0x80000000"
NONE = -1
"""No quality given."""

_WORDS = {"good": Quality.GOOD, "uncertain": Quality.UNCERTAIN, "bad": Quality.BAD}
_INFORMATION_TYPE = 0x00000C00
_INFORMATION_BITS = 0x000003FF


def quality_column(table: Table, name: str) -> NDArray[np.int8]:
    """A column of qualities as codes of Quality (rows,), NONE where empty."""
    column = table.columns[name]
    if table.rows == 0 or pa.types.is_null(column.type):
        return np.full(table.rows, NONE, dtype=np.int8)
    known = pc.dictionary_encode(column)
    codes = np.asarray(pc.fill_null(known.indices, len(known.dictionary)).to_numpy(zero_copy_only=False))
    meanings = [quality_of(cell) for cell in known.dictionary.to_pylist()]
    if None in meanings:
        unknown = meanings.index(None)
        row = int((codes == unknown).argmax())
        raise table.origin.fault(f"{EXPECTED}, found {known.dictionary[unknown].as_py()!r}", row, name)
    of_code: NDArray[np.int8] = np.array([*meanings, NONE], dtype=np.int8)
    return np.asarray(of_code[codes])


def quality_of(cell: object) -> int | None:
    """The quality that one cell stands for: NONE for an empty one, None for one that means nothing.

    A number must be a status code. One with information bits but no type of information, such as 192 or 3, is
    none (OPC UA Part 4, table of StatusCode bit assignments): it comes from another numbering of qualities,
    in which its meaning would be another one.
    """
    if isinstance(cell, str):
        text = cell.strip().lower()
        if text in _WORDS:
            return int(_WORDS[text])
        if text in ("", "nan"):
            return NONE
        try:
            cell = int(text, 16) if text.startswith("0x") else float(text)
        except ValueError:
            return None
    if isinstance(cell, float):
        if not cell.is_integer():
            return None
        cell = int(cell)
    if isinstance(cell, bool) or not isinstance(cell, int) or not 0 <= cell < 2**32:
        return None
    if cell & _INFORMATION_BITS and not cell & _INFORMATION_TYPE:
        return None
    return min(cell >> 30, int(Quality.BAD))
