"""Predicted beside simulated: in the terminal, as plain data, and as scatter figures."""

from __future__ import annotations

import math
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray
from rich.markup import escape

from optisize.errors import printable
from optisize.problem.own_measures import label
from optisize.process.law import Array
from optisize.quantities import write
from optisize.show.plots import panels, pyplot, readable, title_text, write_figure
from optisize.show.sensitivity import change_text
from optisize.show.terminal import console, json_number, print_caution, print_table
from optisize.simulator.resimulate import Comparison, Kept, Resimulated, tolerance

if TYPE_CHECKING:
    from matplotlib.axes import Axes

FIGURE = "resimulation"  # of a run, without its format
SHOWN = 5  # designs whose parting is told
NEAR_EDGE = 0.02  # V from the edge of saturation, where a small shift of a voltage tells


def print_resimulated(found: Resimulated, name: str) -> None:
    """Print predicted beside simulated, median and worst difference of each measure, and where they part."""
    several = len(found.designs) > 1
    rows = [_row(c, several) for c in found.comparisons]
    if several:
        headings = ["measure", "median", "worst", "of design", "predicted", "simulated", "parted"]
        title = f"{found.problem.title}: {int(found.ran.sum())} designs of {name} in {found.simulator}"
    else:
        headings = ["measure", "predicted", "simulated", "difference"]
        title = f"{found.problem.title}: {name} in {found.simulator}"
    print_table(title, headings, rows)
    out = console()
    for measure, why in found.left_out.items():
        out.print(escape(f"{measure}: not simulated, {why}"), soft_wrap=True)
    for line in parting_lines(found):
        out.print(escape(printable(line)), soft_wrap=True)
    for number, why in list(found.failures.items())[:SHOWN]:
        out.print(escape(f"design {number} did not run: {why}"), soft_wrap=True)
    if len(found.failures) > SHOWN:
        out.print(f"and {len(found.failures) - SHOWN} more did not run")
    print_caution()


def _row(c: Comparison, several: bool) -> list[str]:
    m, worst = c.measure, c.worst
    if not several:
        figures = [write(float(x), m.unit, 5) for x in (c.predicted[0], c.simulated[0])]
        return [label(m), *figures, "" if worst is None else change_text(m, float(c.difference[0]))]
    parted = f"{int(c.parted.sum())} of {int((~np.isnan(c.simulated)).sum())}"
    if worst is None:
        return [
            label(m),
            "",
            "",
            "",
            write(float(c.predicted[0]), m.unit),
            write(float(c.simulated[0]), m.unit),
            parted,
        ]
    figures = [write(float(x), m.unit) for x in (c.predicted[worst], c.simulated[worst])]
    median = change_text(m, c.median).removeprefix("+")
    return [label(m), median, change_text(m, float(c.difference[worst])), str(c.designs[worst]), *figures, parted]


def parting_lines(found: Resimulated) -> list[str]:
    """Say plainly which measures part, by how much, at which designs, and which of these stand near an edge."""
    lines = []
    for c in found.comparisons:
        rows = np.flatnonzero(c.parted)
        if not len(rows):
            continue
        rows = rows[np.argsort(-np.nan_to_num(np.abs(c.difference[rows]), nan=np.inf), kind="stable")]
        told = [f"{c.designs[i]} ({_gone(c, int(i))}{_edge(found, int(i))})" for i in rows[:SHOWN]]
        more = f" and {len(rows) - SHOWN} more" if len(rows) > SHOWN else ""
        bound = change_text(c.measure, tolerance(c.measure)).removeprefix("+")
        lines.append(f"{label(c.measure)} parts by more than {bound}: design {', '.join(told)}{more}")
    if not lines:
        return ["prediction and simulation agree in every measure: 0.1 dB, 5 mV, 1 % of a frequency, 0.1 % otherwise"]
    return lines


def _gone(c: Comparison, i: int) -> str:
    if math.isfinite(c.difference[i]):
        return change_text(c.measure, float(c.difference[i]))
    return f"{write(float(c.predicted[i]), c.measure.unit)} predicted, {write(float(c.simulated[i]), c.measure.unit)}"


def _edge(found: Resimulated, i: int) -> str:
    name, room = found.edges[i]
    if abs(room) > NEAR_EDGE:
        return ""
    return f"; {name} is {write(abs(room), 'V', 2)} {'inside' if room > 0.0 else 'out of'} saturation"


def print_kept(kept: Kept, before: int) -> None:
    """Print what a re-simulation has dropped from a front, and which limits want a margin."""
    out, after = console(), len(kept.run.front)
    out.print(f"{after} of {before} designs hold in the simulator: every limit met, none beaten by another")
    reasons = list(kept.dropped.items())
    for number, why in reasons[:SHOWN]:
        out.print(escape(f"dropped: design {number}, {why}"), soft_wrap=True)
    if len(reasons) > SHOWN:
        out.print(f"dropped: {len(reasons) - SHOWN} more; run.json has them")
    for name, gone in kept.shortfalls.items():
        missed = change_text(kept.run.problem.find(name), gone).removeprefix("+")
        out.print(f"limit {escape(name)}: missed by up to {missed} in the simulator; give it a margin of that")


def resimulated_record(found: Resimulated) -> dict[str, Any]:
    """Return a re-simulation as plain data in SI units."""
    return {
        "simulator": found.simulator,
        "designs": [int(n) for n in found.designs],
        "failed": {str(number): why for number, why in found.failures.items()},
        "not_simulated": dict(found.left_out),
        "measures": {
            c.measure.name: {
                "unit": c.measure.unit,
                "difference": "relative" if c.measure.scale == "log" else "in the unit",
                "median": json_number(c.median),
                "worst": None if c.worst is None else json_number(float(c.difference[c.worst])),
                "worst_design": None if c.worst is None else int(c.designs[c.worst]),
                "parted": [int(n) for n in c.designs[c.parted]],
                "predicted": [json_number(x) for x in c.predicted],
                "simulated": [json_number(x) for x in c.simulated],
            }
            for c in found.comparisons
        },
    }


@dataclass(frozen=True)
class Scatter:
    """One measure, simulated over predicted, as it is drawn.

    Attributes:
        label: name, settings of its parameters, and unit.
        predicted, simulated: of the designs that have both, (N,), in that unit.
        parted: which of them differ by more than the kernel's own checks allow, (N,).
        note: median and worst difference in words.
    """

    label: str
    predicted: Array
    simulated: Array
    parted: NDArray[np.bool_]
    note: str


def scatters(found: Resimulated) -> list[Scatter]:
    """Return the figure of every measure that has figures on both sides."""
    return [_scatter(c) for c in found.comparisons if c.worst is not None]


def _scatter(c: Comparison) -> Scatter:
    both = np.isfinite(c.predicted) & np.isfinite(c.simulated)
    factor, unit = readable(c.predicted[both], c.measure.unit)
    name = label(c.measure).replace("_", " ")
    assert c.worst is not None
    worst = change_text(c.measure, float(c.difference[c.worst]))
    median = change_text(c.measure, c.median).removeprefix("+")
    return Scatter(
        label=f"{name} [{unit}]" if unit else name,
        predicted=c.predicted[both] / factor,
        simulated=c.simulated[both] / factor,
        parted=c.parted[both],
        note=f"median {median}, worst {worst}",
    )


def draw_resimulated(found: Resimulated, name: str, path: Path, kind: str = "png", dpi: int = 150) -> None:
    """Draw simulated over predicted for every measure into a file.

    Raises OptisizeError when it cannot be written.
    """
    shown = scatters(found)
    figure, spots = panels(len(shown), 4, 3.9)
    for spot, scatter in zip(spots, shown, strict=True):
        _draw(spot, scatter)
    figure.suptitle(
        f"{title_text(found.problem.title)}\n{title_text(name)}: {int(found.ran.sum())} designs in {found.simulator}",
        fontsize=11,
    )
    try:
        write_figure(figure, path, kind, dpi)
    finally:
        pyplot().close(figure)


def _draw(spot: Axes, shown: Scatter) -> None:
    ends = [f(np.concatenate([shown.predicted, shown.simulated])) for f in (np.min, np.max)]
    margin = 0.04 * (ends[1] - ends[0]) or 0.02 * abs(ends[1]) or 1.0
    line = [ends[0] - margin, ends[1] + margin]
    spot.plot(line, line, color="0.5", linewidth=0.8, zorder=1)
    for chosen, colour, words in ((~shown.parted, "#31688e", "the same"), (shown.parted, "#b5367a", "part")):
        if chosen.any():
            spot.scatter(
                shown.predicted[chosen], shown.simulated[chosen], s=16, color=colour, linewidths=0.3,
                edgecolors="0.25", label=words, zorder=2,
            )  # fmt: skip
    spot.set_xlim(*line)
    spot.set_ylim(*line)
    spot.set_xlabel(f"{shown.label}, predicted", fontsize=9)
    spot.set_ylabel("simulated", fontsize=9)
    spot.set_title(shown.note, fontsize=9, color="0.2")
    if shown.parted.any():
        spot.legend(fontsize=7, frameon=False, loc="upper left")
    spot.grid(True, color="0.9", linewidth=0.6)
    spot.set_axisbelow(True)
