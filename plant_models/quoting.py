"""A found value as it may stand in a message: one line, not long, and never an error of its own."""

from __future__ import annotations

import difflib
from collections.abc import Iterable

_LONGEST = 60


def quoted(value: object) -> str:
    """The value as it would stand in a file, shortened.

    >>> quoted("m3/h"), quoted(True), quoted([1.0, "a"])
    ("'m3/h'", 'true', "[1.0, 'a']")
    """
    if isinstance(value, bool):
        return "true" if value else "false"
    try:
        text = repr(value)
    except (ValueError, RecursionError):  # an integer of thousands of digits, brackets by the hundred
        return f"a {type(value).__name__} too long to show"
    return text if len(text) <= _LONGEST else text[: _LONGEST - 3] + "..."


def printable(word: str) -> str:
    """A key or tag as it is; quoted and shortened where it would break the line."""
    return word if word.isprintable() and len(word) <= _LONGEST else quoted(word)


def suggestion(text: str, known: Iterable[str], likeness: float = 0.6) -> str:
    """``; did you mean 'kPa'?`` where one of the known words is near, else nothing."""
    found = nearest(text, known, likeness)
    return f"; did you mean {quoted(found)}?" if found is not None else ""


def nearest(text: str, known: Iterable[str], likeness: float = 0.6) -> str | None:
    """The known word that is likely meant: the same but for case, else the most similar, else None.

    :param likeness: from 0 to 1, how like it must be (difflib's ratio).
    """
    words = list(known)
    for word in words:
        if word.casefold() == text.casefold():
            return word
    return next(iter(difflib.get_close_matches(text[:200], words, n=1, cutoff=likeness)), None)
