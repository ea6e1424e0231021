"""What the page of a run shows, as plain data: columns, drawn devices, operating points, limits, decks, facts.

Numbers are SI; text is as the problem has it, and is never markup.
"""

from __future__ import annotations

import base64
import gzip
import json
from collections.abc import Iterable
from datetime import UTC, datetime
from typing import Any

import numpy as np

import optisize
from optisize.errors import InputError, printable
from optisize.front.details import Details, details, places
from optisize.front.run import Run
from optisize.front.table import column, measure_names, simulated_column, sizes_of
from optisize.problem.evaluate import Problem
from optisize.problem.own_measures import label
from optisize.process.law import Array
from optisize.quantities import ZERO_CELSIUS, write
from optisize.show.plots import readable
from optisize.show.terminal import CAUTION, json_number
from optisize.simulator.deck import benched, write_deck
from optisize.stage.figures import FIGURES
from optisize.stage.measures import Measure

DIGITS = 9  # of sizes and measures: more than any grid needs
FIGURE_DIGITS = 6  # of an operating point
DERIVED = {"margin": "V", "gm_per_id": "1/V"}  # figures of a transistor beside those of the catalogue


def page_record(run: Run) -> dict[str, Any]:
    """Return everything that the page of a run shows, ready to become JSON.

    Raises InputError for a front without a design, or with one that has no operating point.
    """
    if not len(run.front):
        raise InputError(f"{run.path}: its front is empty; `optisize resume` goes on with the search")
    sizes = sizes_of(run.problem, run.front)
    decks = packed_decks(run)  # first, since they say which design has no operating point
    shown = details(run.problem, sizes)
    columns = list(_columns(run))
    return {
        "title": printable(run.problem.title),
        "caution": CAUTION,
        "facts": facts(run),
        "designs": [int(n) for n in run.front["design"]],
        "columns": columns,
        "values": {c["key"]: _numbers(_values(run, c["heading"]), DIGITS) for c in columns},
        "goals": [g.measure.name for g in run.problem.goals],
        "limits": [_limit(x.measure, bounds=x.bounds, implied=x.implied) for x in run.problem.limits],
        "places": {k: _numbers(v, 4) for k, v in _places(run).items()},
        "first": int(np.argmax(np.min([*_places(run).values()], axis=0))),
        "transistors": _transistors(shown),
        "resistors": _resistors(shown),
        "sources": [{"name": s.name, "key": s.size} for s in run.problem.topology.sources],
        "figures": [{"name": name, "unit": m.unit, "text": m.definition} for name, m in FIGURES.items()]
        + [{"name": name, "unit": unit, "text": ""} for name, unit in DERIVED.items()],
        "deck_command": f"optisize deck {printable(str(run.path))} --design",
        "decks": decks,
    }


def _columns(run: Run) -> Iterable[dict[str, Any]]:
    """Say of every size and measure of the front what it is, goals first, then the free sizes, limits and the rest."""
    problem = run.problem
    measures = [problem.find(name) for name in measure_names(problem)]
    there = [m for m in measures if column(m.name, m.unit) in run.front]
    named = (*problem.needed, *problem.own_measures)
    goals = [g.measure.name for g in problem.goals]
    for m in sorted(there, key=lambda m: m.name not in goals):
        kind = "goal" if m.name in goals else "named" if m.name in named else "other"
        yield _measure_column(run, m, kind, column(m.name, m.unit))
    for m in there:
        if simulated_column(m) in run.front and run.front[simulated_column(m)].notna().any():
            yield _measure_column(run, m, "simulated", simulated_column(m))
    free = {r.size.name for r in problem.space.free}
    for s in problem.topology.sizes:
        kind = "free" if s.name in free else "fixed"
        heading = column(s.name, s.unit)
        log = s.kind != "count"  # sizes are searched on a logarithmic scale; units are few
        yield _column(run, heading, s.name, s.unit, kind=kind, name=s.name, better="", log=log, text=s.meaning)


def _measure_column(run: Run, m: Measure, kind: str, heading: str) -> dict[str, Any]:
    senses = {g.measure.name: g.sense for g in run.problem.goals}
    better = "zero" if m.signed else senses.get(m.name, m.better)
    key = m.name if kind != "simulated" else f"simulated {m.name}"
    name = label(m) if kind != "simulated" else f"simulated {label(m)}"
    log, text = m.scale == "log", m.definition
    return _column(run, heading, key, m.unit, kind=kind, name=name, better=better, log=log, text=text, source=m.source)


def _column(run: Run, heading: str, key: str, unit: str, *, log: bool, **said: Any) -> dict[str, Any]:
    values = _values(run, heading)
    factor, shown = readable(values, unit)
    positive = bool((values[np.isfinite(values)] > 0.0).all())
    return {
        "key": key,
        "heading": heading,
        "unit": unit,
        "factor": factor,
        "shown": shown,
        "log": log and positive,
        **said,
    }


def _values(run: Run, heading: str) -> Array:
    return run.front[heading].to_numpy(dtype=float)


def _numbers(values: Array, digits: int) -> list[float | str | None]:
    return [json_number(float(f"{v:.{digits}g}")) for v in values]


def _limit(m: Measure, *, bounds: tuple[tuple[str, float], ...], implied: bool) -> dict[str, Any]:
    return {"key": m.name, "bounds": dict(bounds), "implied": implied, "signed": m.signed}


def _places(run: Run) -> dict[str, Array]:
    goals = run.problem.goals
    return places(goals, {g.measure.name: _values(run, column(g.measure.name, g.measure.unit)) for g in goals})


def _transistors(shown: Details) -> list[dict[str, Any]]:
    t = shown.transistors
    return [
        {
            "name": t.names[i],
            "group": t.groups[i],
            "channel": t.channels[i],
            "saturates": t.saturates[i],
            "units": [int(u) for u in t.units[i]],
            "fingers": [int(f) for f in t.fingers[i]],
            "finger_width": _numbers(t.finger_width[i], DIGITS),
            "length": _numbers(t.length[i], DIGITS),
            "figures": {name: _numbers(t.figures[name][i], FIGURE_DIGITS) for name in (*FIGURES, *DERIVED)},
        }
        for i in range(len(t.names))
    ]


def _resistors(shown: Details) -> list[dict[str, Any]]:
    r = shown.resistors
    return [
        {
            "name": name,
            "width": float(f"{r.width:.{DIGITS}g}"),
            "resistance": _numbers(r.resistance[i], DIGITS),
            "length": _numbers(r.length[i], DIGITS),
            "squares": _numbers(r.squares[i], DIGITS),
        }
        for i, name in enumerate(r.names)
    ]


def packed_decks(run: Run) -> str:
    """Return the decks of all designs, each as ``optisize deck RUN --design N`` writes it, as base64 of gzip of JSON.

    Decks of one run are nearly alike, so that packed they take less than a thirtieth.

    Raises InputError for a design without an operating point.
    """
    problem, measures = run.problem, benched(run.problem)
    sizes = sizes_of(problem, run.front)
    texts = [
        write_deck(
            problem, {k: v[i : i + 1] for k, v in sizes.items()}, f"design {number} of {run.path}", measures
        ).text
        for i, number in enumerate(run.front["design"])
    ]
    packed = gzip.compress(json.dumps(texts, ensure_ascii=False).encode("utf-8"), mtime=0)
    return base64.b64encode(packed).decode("ascii")


def facts(run: Run) -> list[tuple[str, str]]:
    """Return what was searched, when and with which versions, as names and texts."""
    problem, info = run.problem, run.info
    process, hashes = problem.process, problem.hashes
    known = (("optisize", "optisize"), ("numpy", "numpy"), ("Python", "python"))
    versions = [f"{name} {info[key]}" for name, key in known if key in info]
    counts = [f"{info[key]} {key}" for key in ("generations", "evaluations") if key in info]
    told = [
        ("stage", stage(problem)),
        ("conditions", conditions(problem)),
        ("process", f"{problem.process_name} ({process.title}), {process.law} law, sha256 {hashes['process']}"),
        ("problem", f"{problem.source or 'given'}, sha256 {hashes['problem']}"),
        ("search", ", ".join([*counts, f"seed {info['seed']}", f"{len(run.front)} designs on the front"])),
        ("searched with", ", ".join(versions)),
        ("page", f"written by optisize {optisize.__version__} on {datetime.now(UTC):%Y-%m-%d}"),
    ]
    return [(name, printable(text)) for name, text in told if text]


def stage(problem: Problem) -> str:
    """Return which circuit it is, in the words of a problem file."""
    t = problem.topology
    parts = [f"input {t.input}", f"load {t.load}", f"tail {t.tail}", f"form {t.form}", f"output {t.output_kind}"]
    return ", ".join([*parts, f"bulk of the pair: {t.bulk}"])


def conditions(problem: Problem) -> str:
    """Return what the stage is exposed to, in words."""
    c = problem.conditions
    low, high = (write(v, "V") for v in c.common_mode)
    parts = [
        f"supply {write(c.supply, 'V')}",
        f"common mode {low if low == high else f'{low} to {high}'}",
        *([] if c.output_common_mode is None else [f"output common mode {write(c.output_common_mode, 'V')}"]),
        f"load {write(c.load_capacitance, 'F')}",
        f"{write(c.temperature - ZERO_CELSIUS, '')} degC",
        f"corner {c.corner}",
    ]
    return ", ".join(parts)
