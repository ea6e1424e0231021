"""The errors that a user may see; the command line catches them in one place."""

from __future__ import annotations

import difflib
import json
from collections.abc import Iterable


class OptisizeError(Exception):
    """The work could not be done (a full disk, a missing program).

    Attributes:
        exit_code: of the command line.
        lines: whether the message has more lines than one.
    """

    exit_code = 1
    lines = False


class InputError(OptisizeError):
    """A file, a key or an option is wrong."""

    exit_code = 2


class NothingFeasible(OptisizeError):
    """The search found no design that meets every limit."""

    exit_code = 3
    lines = True


class SimulationFailed(OptisizeError):
    """The circuit simulator gave no result; the message ends with its own last lines."""

    lines = True


def nearest(name: str, allowed: Iterable[str]) -> str:
    """Return a hint ``; did you mean "x"?`` for the allowed name nearest to `name`, or an empty string."""
    close = difflib.get_close_matches(name, list(allowed), n=1, cutoff=0.5)
    return f'; did you mean "{close[0]}"?' if close else ""


def listing(names: Iterable[str]) -> str:
    """Return the names as they are listed in a message: ``a, b, c``."""
    return ", ".join(names)


def shorten(value: object, limit: int = 60) -> str:
    """Return a printable, single-line, bounded rendering of a value that was found in a file, as files write it."""
    text = f'"{value}"' if isinstance(value, str) else json.dumps(value, ensure_ascii=False, default=str)
    text = printable(text)
    return text if len(text) <= limit else text[: limit - 1] + "…"


def one_line(text: str, limit: int = 2000) -> str:
    """Return a message on one line, bounded."""
    text = printable(" ".join(text.split()))
    return text if len(text) <= limit else text[: limit - 1] + "…"


def printable(text: str) -> str:
    """Return a text on one line, with a question mark for each character that a terminal would act upon."""
    return "".join(c if c.isprintable() else "?" for c in text)
