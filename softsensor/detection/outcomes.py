"""What one cycle's news brings: the book of flags after it, flags opened or cleared, notes, rests."""

from __future__ import annotations

from dataclasses import dataclass, replace

from softsensor.detection.flags import (
    Exclusion,
    Flag,
    FlagBook,
    Kind,
    Note,
    RestSpell,
)
from softsensor.estimation.kernel import Ints

SHIFT_KINDS: tuple[Kind, ...] = ("bias", "drift")
LASTING: tuple[Kind, ...] = (*SHIFT_KINDS, "model")
"""Kinds that come from a diagnosis and clear when all has been quiet."""
EXPLAINING: tuple[Kind, ...] = (*LASTING, "stuck", "noisy")
"""While such a fault is open on an instrument in use, it explains what other tests say."""
PATIENCE = 60
"""Cycles for which a name is waited for before a group is flagged, and between two times that gains are weighed; units take
their turns within it, so that a hundred of them do not all weigh in the same second."""


@dataclass(frozen=True)
class FollowUp:
    """The outcome of one cycle's news."""

    book: FlagBook
    changes: tuple[Flag, ...] = ()
    """Flags opened or cleared at this cycle."""
    notes: tuple[Note, ...] = ()
    rests: tuple[RestSpell, ...] = ()
    """Times in which tests rest, begun or given an end at this cycle."""
    exclusion: Exclusion | None = None
    """A sensor to be left out, from its onset on."""


@dataclass(frozen=True)
class Moment:
    """The cycle that has news: its number, its time, the event bits per sensor and of all together."""

    cycle: int
    time: int
    events: Ints
    news: int


def opened(outcome: FollowUp, flag: Flag) -> FollowUp:
    """The outcome with one flag more."""
    book = replace(outcome.book, open=(*outcome.book.open, flag))
    return replace(outcome, book=book, changes=(*outcome.changes, flag))


def cleared(outcome: FollowUp, flag: Flag, time: int) -> FollowUp:
    """The outcome with a flag cleared at ``time``."""
    remaining = tuple(item for item in outcome.book.open if item.flag != flag.flag)
    return replace(
        outcome,
        book=replace(
            outcome.book,
            open=remaining,
            absorbed=tuple(name for name in outcome.book.absorbed if name != flag.flag),
        ),
        changes=(*outcome.changes, flag.closed(time)),
    )
