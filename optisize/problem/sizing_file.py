"""A sizing as a file that reads back to exactly the same design."""

from __future__ import annotations

import textwrap
from collections.abc import Mapping, Sequence

import numpy as np

from optisize.errors import printable
from optisize.files import quoted
from optisize.problem.space import SizingSpace
from optisize.quantities import QuantityError, read, write
from optisize.stage.elements import Size

LONGEST_TITLE = 200  # characters; what a sizing file may have
COMMENT = 110  # characters of a line of a comment
_FEWEST, _MOST = 3, 15  # digits of a quantity


def exact_text(space: SizingSpace, size: Size, value: float) -> str:
    """Return the shortest engineering text that reads back to one value of a size [SI]: ``85.35 um``, ``16``.

    Read back means as a sizing file is read, snapped to the grid. A value that is not on the grid is written as it is.
    """
    if size.kind == "count" and value == round(value):
        return str(round(value))
    for digits in range(_FEWEST, _MOST + 1):
        text = write(value, size.unit, digits)
        if _read_back(space, size, text) == value:
            return text
    return f"{value!r} {size.unit}".strip()


def _read_back(space: SizingSpace, size: Size, text: str) -> float | None:
    try:
        return float(space.snap(size, np.array([read(text, size.unit)]))[0])
    except QuantityError:
        return None


def sizing_text(space: SizingSpace, sizes: Mapping[str, float], title: str, notes: Sequence[str] = ()) -> str:
    """Return the text of a sizing file: notes as comments, a title, and every size of the stage.

    Args:
        space: of the problem.
        sizes: one value for every size [SI].
        title: what the sizing is; cut to what a file may have.
        notes: each begins a line.
    """
    width = max(len(size.name) for size in space.topology.sizes)
    lines = [f"# {line}" for note in notes for line in textwrap.wrap(printable(note), COMMENT)]
    lines += [f"title = {quoted(title[:LONGEST_TITLE])}", "", "[sizes]"]
    for size in space.topology.sizes:
        text = exact_text(space, size, sizes[size.name])
        lines.append(f"{size.name:{width}} = {text if size.kind == 'count' else quoted(text)}")
    return "\n".join(lines) + "\n"
