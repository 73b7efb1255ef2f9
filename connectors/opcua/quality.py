"""What an OPC UA status code says: severity, name, limit bits.

A status code has 32 bits: the upper 16 are the code, with the severity in bits 30-31; the lower 16 are flags
that do not change its meaning, among them the limit bits 8-9 (none, low, high, constant), valid where bits
10-11 say that the code belongs to a data value, and bit 7 for an overflowed queue. Source: OPC UA Part 4,
7.39 and Part 8.
"""

from __future__ import annotations

from enum import IntEnum

from asyncua.ua.status_codes import code_to_name_doc

from connectors.readings import Quality

CODE_MASK = 0xFFFF0000
_INFO_TYPE_MASK = 0x0C00
_INFO_TYPE_DATA_VALUE = 0x0400
_OVERFLOW = 0x0080

GOOD = 0x00000000
BAD_NODE_ID_UNKNOWN = 0x80340000
BAD_OUT_OF_RANGE = 0x803C0000
BAD_TYPE_MISMATCH = 0x80740000


class Limit(IntEnum):
    """Limit bits: the value sits at a limit of its instrument, or cannot move."""

    NONE = 0
    LOW = 1
    HIGH = 2
    CONSTANT = 3


_LIMIT_TEXT = {Limit.LOW: "limit low", Limit.HIGH: "limit high", Limit.CONSTANT: "constant"}


def quality_of(status: int) -> Quality:
    """Severity of a status code. Bits 30-31 both set are reserved and count as Bad (Part 4, 7.39).

    >>> quality_of(0x408F0000)
    <Quality.UNCERTAIN: 1>
    """
    severity = (status >> 30) & 0b11
    return Quality.BAD if severity > 1 else Quality(severity)


def limit_of(status: int) -> Limit:
    """The limit bits, or none where the code's flags are not those of a data value."""
    if status & _INFO_TYPE_MASK != _INFO_TYPE_DATA_VALUE:
        return Limit.NONE
    return Limit((status >> 8) & 0b11)


def with_limit(status: int, limit: Limit) -> int:
    """The same status code with these limit bits, marked as belonging to a data value."""
    bare = status & ~(_INFO_TYPE_MASK | 0x0300)
    return bare if limit is Limit.NONE else bare | _INFO_TYPE_DATA_VALUE | (limit << 8)


def overflowed(status: int) -> bool:
    """Whether the server's queue for this value ran over, so that values before it were lost."""
    return status & _INFO_TYPE_MASK == _INFO_TYPE_DATA_VALUE and bool(status & _OVERFLOW)


def status_name(status: int) -> str:
    """The code's name, whatever its flags; a code that the standard does not name is given in hexadecimal."""
    entry = code_to_name_doc.get(status & CODE_MASK)
    return (
        entry[0]
        if entry is not None
        else f"{quality_of(status).name.capitalize()} 0x{status & CODE_MASK:08X}"
    )


def status_text(status: int) -> str:
    """A status code in words.

    >>> status_text(0x808C0600)
    'BadSensorFailure, limit high'
    """
    parts = [status_name(status)]
    limit = limit_of(status)
    if limit is not Limit.NONE:
        parts.append(_LIMIT_TEXT[limit])
    if overflowed(status):
        parts.append("queue overflowed")
    return ", ".join(parts)
