"""The errors that a user may see; the command line catches them in one place."""

from __future__ import annotations

import difflib
from collections.abc import Iterable


class OptisizeError(Exception):
    """The work could not be done (a full disk, a missing program)."""

    exit_code = 1


class InputError(OptisizeError):
    """A file, a key or an option is wrong."""

    exit_code = 2


class NothingFeasible(OptisizeError):
    """The search found no design that meets every limit."""

    exit_code = 3


def nearest(name: str, allowed: Iterable[str]) -> str:
    """Return a hint ``; did you mean "x"?`` for the allowed name nearest to `name`, or an empty string."""
    close = difflib.get_close_matches(name, list(allowed), n=1, cutoff=0.5)
    return f'; did you mean "{close[0]}"?' if close else ""


def listing(names: Iterable[str]) -> str:
    """Return the names as they are listed in a message: ``a, b, c``."""
    return ", ".join(names)


def shorten(value: object, limit: int = 60) -> str:
    """Return a printable, single-line, bounded rendering of a value that was found in a file."""
    text = repr(value) if not isinstance(value, str) else f'"{value}"'
    text = "".join(c if c.isprintable() else "?" for c in text)
    return text if len(text) <= limit else text[: limit - 1] + "…"
