"""The figures of a run by name, and drawing them into a directory."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING

from optisize.errors import InputError
from optisize.front.run import Run
from optisize.show.history import draw_history
from optisize.show.parallel import draw_parallel
from optisize.show.plots import write_formats
from optisize.show.trade_offs import draw_trade_offs

if TYPE_CHECKING:
    from matplotlib.figure import Figure

DRAWINGS: dict[str, Callable[[Run, int | None], Figure]] = {
    "trade-offs": draw_trade_offs,
    "parallel": draw_parallel,
    "history": lambda run, _: draw_history(run),
}


def drawable(run: Run, names: Sequence[str] | None = None) -> list[str]:
    """Return which figures, of the named ones or of all, can be drawn.

    Raises InputError for one that is named and cannot be.
    """
    reasons = {}
    if not len(run.front):
        reasons = dict.fromkeys(("trade-offs", "parallel"), "the front is empty")
    elif len(run.problem.goals) < 2:
        reasons["trade-offs"] = f"there is one goal only, {run.problem.goals[0].measure.name}"
    if not names:
        return [name for name in DRAWINGS if name not in reasons]
    impossible = next((name for name in names if name in reasons), None)
    if impossible is not None:
        raise InputError(f"--only: found {impossible}; it cannot be drawn: {reasons[impossible]}")
    return [name for name in DRAWINGS if name in names]


def mismatch_name(design: int) -> str:
    """Return the name of the figure of a design's mismatch, without its format; see `front.run.FIGURES`."""
    return f"mismatch-{design}"


def write_figures(
    run: Run,
    directory: Path,
    formats: Sequence[str] = ("png",),
    dpi: int = 150,
    *,
    names: Sequence[str] | None = None,
    design: int | None = None,
) -> list[Path]:
    """Draw figures of a run into a directory, each file whole or not at all; return their paths.

    Args:
        run: the run.
        directory: where to.
        formats: of `plots.FORMATS`.
        dpi: dots per inch of a png.
        names: of `DRAWINGS`; those that the run has where None.
        design: the number of a design to mark.

    Raises OptisizeError when they cannot be written.
    """
    written = []
    for name in drawable(run) if names is None else names:
        written += write_formats(DRAWINGS[name](run, design), directory, name, formats, dpi)
    return written
