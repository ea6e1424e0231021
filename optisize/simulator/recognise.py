"""What the text of a library says of one of its transistors: how a deck calls it, and the thickness of its oxide."""

from __future__ import annotations

import re
from collections.abc import Iterable

from optisize.process.library import LibraryDevice
from optisize.simulator.limits import LibraryText, number

_PAIR = re.compile(r"([A-Za-z_]\w*)\s*=")
_OXIDE = re.compile(r"\b(?:toxe|tox|toxm)\s*=\s*(\S+)", re.IGNORECASE)
OPTIONAL = {
    "fingers": "nf",
    "drain_area": "ad",
    "source_area": "as",
    "drain_edge": "pd",
    "source_edge": "ps",
}


def recognised(device: LibraryDevice, text: LibraryText) -> LibraryDevice:
    """Return a device with what its subcircuit or model says: the order of its terminals, the keys that it has.

    What the text does not say stays as given.
    """
    header = _header(device.name, text)
    if header is None:
        is_model = any(name == device.name.lower() for name in models(text))
        # A model takes the keys of every transistor; its fingers are one unless said.
        return device.model_copy(update={"kind": "model", "fingers": ""}) if is_model else device
    words, keys = header
    changed: dict[str, str] = {"kind": "subcircuit", "inner": device.inner or _first_inside(device.name, text)}
    if sorted(words) == sorted("dgsb"):
        changed["terminals"] = "".join(words)
    for field, key in OPTIONAL.items():
        if getattr(device, field) == key and key not in keys:
            changed[field] = ""
    return device.model_copy(update=changed)


def _header(name: str, text: LibraryText) -> tuple[list[str], set[str]] | None:
    """Return terminals and keys of a subcircuit, in small letters."""
    for line in text.lines:
        words = line.lower().split()
        if len(words) > 1 and words[0] == ".subckt" and words[1] == name.lower():
            head = line.lower().split(None, 2)[2] if len(words) > 2 else ""
            keys = set(_PAIR.findall(head))
            first = _PAIR.search(head)
            nodes = head[: first.start()].split() if first else head.split()
            return [node for node in nodes if node != "params:"], keys
    return None


def _first_inside(name: str, text: LibraryText) -> str:
    """Return the first transistor of a subcircuit, or an empty text."""
    inside = False
    for line in text.lines:
        words = line.lower().split()
        if words[0] == ".subckt":
            inside = len(words) > 1 and words[1] == name.lower()
        elif inside and words[0].startswith("m"):
            return words[0]
    return ""


def models(text: LibraryText) -> list[str]:
    """Return the names of the transistor models, in small letters, bins taken together."""
    found: dict[str, None] = {}
    for line in text.lines:
        words = line.lower().split()
        if len(words) > 2 and words[0] == ".model" and words[2].strip("(") in ("nmos", "pmos"):
            head, _, tail = words[1].rpartition(".")
            found[head if tail.isdigit() else words[1]] = None
    return list(found)


def names(text: LibraryText) -> list[str]:
    """Return what the library has: subcircuits and transistor models."""
    subcircuits: Iterable[str] = (
        line.split()[1] for line in text.lines if line.lower().startswith(".subckt") and len(line.split()) > 1
    )
    return list(dict.fromkeys([*subcircuits, *models(text)]))


def oxide(model: str, text: LibraryText) -> float | None:
    """Return the thickness of a model's oxide [m], or None."""
    for line in text.lines:
        words = line.lower().split()
        if len(words) > 1 and words[0] == ".model" and (words[1] == model or words[1].startswith(f"{model}.")):
            match = _OXIDE.search(line)
            thickness = number(match[1]) if match else None
            if thickness is not None and 1e-10 < thickness < 1e-6:
                return thickness
    return None
