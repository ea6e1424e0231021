"""What a SPICE model library says of itself in its text: its files, and between which sizes its models hold.

Only what is written as plain numbers is read; everything else is left to the circuit simulator.
"""

from __future__ import annotations

import hashlib
import re
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

from optisize.errors import InputError, listing, nearest
from optisize.process.law import Array

DEEP = 20  # files and sections inside each other
LARGEST = 200_000_000  # bytes of a library's text
_SUFFIXES = {"t": 1e12, "g": 1e9, "meg": 1e6, "k": 1e3, "m": 1e-3, "u": 1e-6, "n": 1e-9, "p": 1e-12, "f": 1e-15}
_NUMBER = re.compile(r"([-+]?(?:\d+\.?\d*|\.\d+)(?:e[-+]?\d+)?)(meg|[tgkmunpf])?", re.IGNORECASE)
_REFERENCE = re.compile(r"^\.(lib|include|inc)\s+(\"[^\"]+\"|'[^']+'|\S+)(?:\s+(\S+))?\s*$", re.IGNORECASE)
_OPENS = re.compile(r"^\.lib\s+(\S+)\s*$", re.IGNORECASE)
_LIMIT = re.compile(r"\b(lmin|lmax|wmin|wmax)\s*=\s*(\S+)", re.IGNORECASE)
_MODEL = re.compile(r"^\.model\s+(\S+)", re.IGNORECASE)


@dataclass
class LibraryText:
    """The text of a library: the lines of the sections that a deck reads, and the files that they are in.

    Attributes:
        lines: of the chosen sections, comments and empty lines left out, continued lines joined.
        files: every file that was read, in the order in which it was met.
    """

    lines: list[str] = field(default_factory=list)
    files: list[Path] = field(default_factory=list)

    @property
    def sha256(self) -> str:
        """The hash of all files, one after the other."""
        digest = hashlib.sha256()
        for file in self.files:
            digest.update(file.read_bytes())
        return digest.hexdigest()


def read_library(path: Path, sections: Sequence[str]) -> LibraryText:
    """Read the sections of a library and everything that they refer to; an empty section is the whole file.

    Raises InputError when the library or one of its files or sections is not there.
    """
    if path.is_dir():
        raise InputError(f"{path}: is a directory; the file of the model library is needed")
    text, kept = LibraryText(), dict[Path, dict[str, list[str]]]()
    for section in sections:
        _follow(path, section, text, kept, ())
    return text


def section_names(path: Path) -> tuple[str, ...]:
    """Return the sections of one file of a library."""
    return tuple(name for name in _sections(path) if name)


def _follow(
    path: Path, section: str, text: LibraryText, kept: dict[Path, dict[str, list[str]]], within: tuple[str, ...]
) -> None:
    path = path.resolve()
    if path not in kept:
        kept[path] = _sections(path)
        text.files.append(path)
    found = {name.lower(): lines for name, lines in kept[path].items()}
    if section.lower() not in found:
        names = [name for name in kept[path] if name]
        raise InputError(
            f'{path}: has no section "{section}"; '
            + (f"allowed are {listing(names[:40])}{nearest(section, names)}" if names else "it has no sections")
        )
    key = f"{path} {section.lower()}"
    if key in within or len(within) >= DEEP:
        raise InputError(f"{path}: section {section} refers to itself")
    for line in found[section.lower()]:
        match = _REFERENCE.match(line)
        if match is None or (match[1].lower() == "lib" and match[3] is None):
            text.lines.append(line)
            continue
        target = Path(match[2].strip("\"'"))
        _follow(path.parent / target, match[3] or "", text, kept, (*within, key))


def _sections(path: Path) -> dict[str, list[str]]:
    """Return the logical lines of a file by section; those outside of any under an empty name."""
    try:
        if not path.is_file():
            raise InputError(f"{path}: there is no such file of the model library")
        if path.stat().st_size > LARGEST:
            raise InputError(f"{path}: larger than {LARGEST // 1_000_000} MB, which no model library is")
        raw = path.read_bytes().decode("latin-1")
    except OSError as error:
        raise InputError(f"{path}: cannot be read: {error.strerror or error}") from None
    if "\0" in raw:
        raise InputError(f"{path}: is not a text file, so it is no SPICE model library")
    sections: dict[str, list[str]] = {"": []}
    current = ""
    for line in _logical(raw):
        opened = _OPENS.match(line)
        if opened:
            current = opened[1].strip("\"'")
            sections.setdefault(current, [])
        elif line.lower().startswith(".endl"):
            current = ""
        else:
            sections[current].append(line)
    return sections


def _logical(raw: str) -> Iterator[str]:
    """Give the lines of a file without comments, those that are continued joined."""
    parts: list[str] = []
    for line in raw.splitlines():
        line = re.split(r"\s\$|;", line, maxsplit=1)[0].strip()
        if not line or line[0] in "*$":
            continue
        if line[0] == "+":
            parts.append(line[1:].strip())
            continue
        if parts:
            yield " ".join(parts)
        parts = [line]
    if parts:
        yield " ".join(parts)


def number(text: str) -> float | None:
    """Return a number as SPICE writes it (``2.8e-07``, ``0.28u``), or None for anything else."""
    match = _NUMBER.match(text.strip("'{}"))
    if match is None or match.end() == 0:
        return None
    return float(match[1]) * _SUFFIXES.get((match[2] or "").lower(), 1.0)


@dataclass(frozen=True)
class Limits:
    """Where the models of one transistor hold, and where one of them ends and the next begins [m], rising.

    Empty where the text does not say.
    """

    lengths: Array
    widths: Array


def model_limits(text: LibraryText, model: str) -> Limits:
    """Return the limits of a model, or of its bins, which are named like ``model.0``, ``model.1``."""
    name = model.lower()
    edges: dict[str, set[float]] = {"l": set(), "w": set()}
    for line in text.lines:
        match = _MODEL.match(line)
        if match is None:
            continue
        found = match[1].lower()
        if found != name and not (found.startswith(f"{name}.") and found[len(name) + 1 :].isdigit()):
            continue
        for key, value in _LIMIT.findall(line):
            size = number(value)
            if size is not None and 0.0 < size < 1.0:
                edges[key[0].lower()].add(float(f"{size:.9g}"))
    return Limits(*(np.array(sorted(edges[key])) for key in ("l", "w")))
