"""The design sheet of one design as a plain record: what both the PDF and the page show, every figure as text."""

from __future__ import annotations

import datetime
import hashlib
import platform
import shlex
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path

import numpy as np

import optisize
from optisize.errors import InputError, printable
from optisize.files import read_bytes
from optisize.front.contributors import offset_contributors
from optisize.front.details import Details, details
from optisize.front.pick import Picked
from optisize.front.table import measure_names
from optisize.problem.evaluate import Limit, Problem
from optisize.problem.own_measures import label
from optisize.process.law import Array
from optisize.quantities import ZERO_CELSIUS, write
from optisize.show.schematic import schematic
from optisize.show.schematic_shapes import Schematic
from optisize.show.sheet_texts import drawn_texts, micrometres
from optisize.show.terminal import CAUTION
from optisize.stage.measures import CATALOGUE, Measure

ROOM = (785.0, 344.0)  # points that the schematic has on a page
LARGEST = 1.5  # how much it may be magnified
MOST, LEAST = 6, 1e-4  # contributors to the offset that are listed, and the share of its variance that one has
MET, MISSED = "met", "MISSED"

OPERATING_POINT = ("id", "vgs", "vds", "vdsat", "margin", "gm", "gds", "gm_per_id", "inversion")
_UNITS = {"id": "A", "gm": "S", "gds": "S", "gm_per_id": "", "inversion": ""}  # V otherwise


@dataclass(frozen=True)
class Table:
    """A table of text; its first `words` columns hold words, the rest numbers."""

    title: str
    headings: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]
    words: int = 1
    note: str = ""


@dataclass(frozen=True)
class Sheet:
    """All that a design sheet shows.

    Attributes:
        title, design: of the problem, and what the design is called.
        date: when the sheet was made, ISO 8601.
        facts: what the stage is and what it is exposed to, by a word for each.
        results: goals and limits.
        tables: the others, in their order.
        schematic, caption: the drawing, and what is said below it.
        origins: where the figures come from: versions, hashes, the command for the deck.
        caution: what no figure here replaces.
    """

    title: str
    design: str
    date: str
    facts: tuple[tuple[str, str], ...]
    results: Table
    tables: tuple[Table, ...]
    schematic: Schematic
    caption: str
    origins: tuple[tuple[str, str], ...]
    caution: str = CAUTION

    def table(self, title: str) -> Table:
        """Return one of the tables by its title."""
        return next(t for t in self.tables if t.title == title)


def make_sheet(
    picked: Picked, source: Path, design: int | None = None, sizing: Path | None = None, date: str = ""
) -> Sheet:
    """Return the sheet of a design.

    Args:
        picked: the design.
        source, design, sizing: where it was picked from: a run or problem, and a number or a sizing file.
        date: of the sheet; today where empty.

    Raises InputError when it has no operating point.
    """
    problem, sizes = picked.problem, picked.sizes
    values = problem.measure(sizes, measure_names(problem))
    if not problem.judge(values).solved[0]:
        raise InputError(f"{picked.label}: {problem.why_unsolved(sizes)}")
    found = details(problem, sizes)
    figures = {name: float(v[0]) for name, v in values.items()}
    tables = (
        operating_point(found),
        drawn_transistors(found),
        *([drawn_resistors(found)] if found.resistors.names else []),
        *mismatch(problem, sizes, figures),
        other_measures(problem, figures),
        sizing_table(problem, sizes),
    )
    return Sheet(
        title=printable(problem.title),
        design=printable(picked.label),
        date=date or datetime.date.today().isoformat(),
        facts=tuple((name, printable(text)) for name, text in facts(problem)),
        results=results(problem, values),
        tables=tables,
        schematic=drawing(problem, sizes, found),
        caption=caption(problem),
        origins=tuple((n, printable(t)) for n, t in origins(problem, source, design, sizing)),
    )


def drawing(problem: Problem, sizes: Mapping[str, Array], found: Details) -> Schematic:
    """Return the schematic, with sizes on two lines where those on one would have to be shown smaller than meant."""
    shown = schematic(problem.topology, drawn_texts(problem, sizes, found, wrapped=False))
    if magnification(shown, *ROOM) >= 1.0:
        return shown
    return schematic(problem.topology, drawn_texts(problem, sizes, found, wrapped=True))


def magnification(shown: Schematic, width: float, height: float) -> float:
    """Return how much a schematic can be magnified in a room [points]."""
    box = shown.box
    return min(width / (box.right - box.left), height / (box.top - box.bottom), LARGEST)


def caption(problem: Problem) -> str:
    """Return what is said below the schematic."""
    bulks = "of the pair at their sources" if problem.topology.bulk == "source" else "at their rails"
    others = ", the others at their rails" if problem.topology.bulk == "source" else ""
    return (
        "Sizes: fingers x width of one finger / channel length, of one unit. Voltages at rest, both inputs at "
        f"{write(problem.conditions.middle, 'V')}. Bulks {bulks}{others}."
    )


def facts(problem: Problem) -> Iterator[tuple[str, str]]:
    """Return what the stage is and what it is exposed to."""
    t, c, process = problem.topology, problem.conditions, problem.process
    words = [f"{t.input} input", f"{t.load} load", f"{t.tail} tail", f"{t.output_kind} output"]
    words += [t.form] * (t.form != "simple") + ["pair in a well of its own"] * (t.bulk == "source")
    words += ["degenerated"] * ("input.degeneration" in t.size_names)
    yield "stage", ", ".join(words)
    yield "process", f"{problem.process_name}: {process.title} (law: {process.law})"
    yield "corner", f"{c.corner}, {c.temperature - ZERO_CELSIUS:.4g} degC"
    yield "supply", write(c.supply, "V")
    low, high = (write(v, "V") for v in c.common_mode)
    yield "common mode", low if low == high else f"{low} to {high}"
    if c.output_common_mode is not None:
        yield "output common mode", write(c.output_common_mode, "V")
    yield "load", f"{write(c.load_capacitance, 'F')} from each output to ground"


def results(problem: Problem, values: Mapping[str, Array]) -> Table:
    """Return goals and limits with the figures of the design."""
    rows = []
    for goal in problem.goals:
        m = goal.measure
        rows.append((label(m), f"goal: {goal.sense}", write(float(values[m.name][0]), m.unit), ""))
    for limit in problem.limits:
        m, value = limit.measure, values[limit.measure.name]
        for kind, bound in limit.bounds:
            alone = Limit(m, *((bound, None) if kind == "min" else (None, bound)))
            wanted = f"{kind} {write(bound, m.unit)}{' (implied)' if limit.implied else ''}"
            met = MET if bool(alone.met(value)[0]) else MISSED
            rows.append((label(m), wanted, write(float(value[0]), m.unit), met))
    return Table("goals and limits", ("measure", "wanted", "figure", ""), tuple(rows), words=2)


def operating_point(found: Details) -> Table:
    """Return where every transistor works."""
    t = found.transistors
    rows = []
    for i, name in enumerate(t.names):
        figures = [write(float(t.figures[key][i, 0]), _UNITS.get(key, "V"), 3) for key in OPERATING_POINT]
        rows.append((name, t.channels[i], *figures))
    headings = [{"gm_per_id": "gm/id [1/V]"}.get(key, key) for key in OPERATING_POINT]
    return Table(
        "operating point",
        ("transistor", "channel", *headings),
        tuple(rows),
        words=2,
        note="margin: vds - vdsat; diode-connected transistors are saturated by themselves; "
        "inversion: weak below 0.1, strong above 10",
    )


def drawn_transistors(found: Details) -> Table:
    """Return how every transistor is drawn; those that are drawn alike share a row."""
    t = found.transistors
    alike: dict[tuple[str, ...], list[str]] = {}
    for i, name in enumerate(t.names):
        units, fingers = (float(x[i, 0]) for x in (t.units, t.fingers))
        finger, length = (float(x[i, 0]) for x in (t.finger_width, t.length))
        shape = (f"{units:.0f}", f"{fingers:.0f}", micrometres(finger), micrometres(length))
        alike.setdefault((t.groups[i], *shape, micrometres(units * fingers * finger)), []).append(name)
    rows = tuple((", ".join(names), *shape[1:]) for shape, names in alike.items())
    headings = ("transistors", "units", "fingers of a unit", "width of a finger", "length", "whole width")
    return Table("drawn transistors", headings, rows)


def drawn_resistors(found: Details) -> Table:
    """Return how every resistor is drawn; those that are drawn alike share a row."""
    r = found.resistors
    alike: dict[tuple[str, ...], list[str]] = {}
    for i, name in enumerate(r.names):
        shape = (write(float(r.resistance[i, 0]), "ohm", 6), f"{float(r.squares[i, 0]):.6g}")
        alike.setdefault((*shape, micrometres(float(r.length[i, 0])), micrometres(r.width)), []).append(name)
    rows = tuple((", ".join(names), *shape) for shape, names in alike.items())
    return Table("drawn resistors", ("resistors", "resistance", "squares", "length", "width"), rows)


def _is_of_mismatch(measure: Measure) -> bool:
    return measure.source == CATALOGUE["offset_sigma"].source


def mismatch(problem: Problem, sizes: Mapping[str, Array], figures: Mapping[str, float]) -> Iterator[Table]:
    """Return the measures of mismatch, and what makes the offset."""
    measures = [problem.find(name) for name in figures]
    rows = [(label(m), write(figures[m.name], m.unit)) for m in measures if _is_of_mismatch(m)]
    yield Table("mismatch", ("measure", "figure"), tuple(rows))
    largest = [c for c in offset_contributors(problem, sizes)[:MOST] if c.share >= LEAST]
    if largest:
        yield Table(
            "largest contributors to the offset",
            ("devices", "of", "sigma at the input", "of the variance"),
            tuple((", ".join(c.devices), c.kind, write(c.sigma, "V", 3), f"{100.0 * c.share:.3g} %") for c in largest),
            words=2,
        )


def other_measures(problem: Problem, figures: Mapping[str, float]) -> Table:
    """Return the measures beside goals, limits and mismatch that have a figure."""
    measures = [problem.find(name) for name in figures if name not in problem.needed]
    shown = [m for m in measures if np.isfinite(figures[m.name]) and not _is_of_mismatch(m)]
    rows = tuple((label(m), write(figures[m.name], m.unit)) for m in shown)
    return Table("other measures", ("measure", "figure"), rows)


def sizing_table(problem: Problem, sizes: Mapping[str, Array]) -> Table:
    """Return the value of every size, with the range that the problem gives it."""
    rows = []
    for r in problem.space.ranges:
        low, high = (write(v, r.size.unit, 6) for v in (r.low, r.high))
        value = write(float(sizes[r.size.name][0]), r.size.unit, 6)
        rows.append((r.size.name, value, f"{low} to {high}" if r.free else "fixed"))
    return Table("sizing", ("size", "value", "range"), tuple(rows))


def origins(problem: Problem, source: Path, design: int | None, sizing: Path | None) -> Iterator[tuple[str, str]]:
    """Return where the figures come from, and the command for the deck of the same design."""
    if design is not None:
        words = ["optisize", "deck", str(source), "--design", str(design), "--to", f"design-{design}.sp"]
    else:
        words = ["optisize", "deck", str(source), "--sizing", str(sizing), "--to", f"{Path(str(sizing)).stem}.sp"]
    yield "SPICE deck", shlex.join(words)
    yield "versions", f"optisize {optisize.__version__}, numpy {np.__version__}, Python {platform.python_version()}"
    for name, digest in problem.hashes.items():
        yield f"SHA-256 of the {name}", digest
    if sizing is not None:
        yield "SHA-256 of the sizing", hashlib.sha256(read_bytes(sizing)).hexdigest()
