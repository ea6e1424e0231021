"""Fronts of several runs beside each other: in the terminal, and as plain data."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

import numpy as np
from rich.markup import escape

from optisize.errors import listing, printable
from optisize.front.differences import differences, stage_in_words
from optisize.front.fronts import Fronts
from optisize.front.leads import SAME, WINDOW, Band, Level
from optisize.problem.evaluate import Goal
from optisize.problem.own_measures import label
from optisize.process.law import Array
from optisize.quantities import write
from optisize.show.terminal import console, json_number, print_caution, print_table
from optisize.stage.measures import CATALOGUE

BOUND = {"max": "at least", "min": "at most"}
MOST = {"max": "highest", "min": "lowest"}
FURTHER = {"max": "below", "min": "above"}
NOBODY = "–"  # where a run has no design


def print_comparison(fronts: Fronts, levels: Sequence[Level]) -> None:
    """Print what each run reaches, what differs between them, and where each is ahead."""
    _print_runs(fronts)
    _print_differences(fronts)
    _print_coverage(fronts)
    for level in levels:
        _print_level(fronts, level)
    factor, decibels = 100.0 * (10.0 ** SAME["log"] - 1.0), CATALOGUE["gain"].step * SAME["linear"]
    console().print()
    _say(
        f"*: the best, and what is alike to a designer ({factor:.0f} % of a current, {decibels:.1f} dB of a gain); "
        f"ahead: on the mean over {100.0 * WINDOW:.0f} % of the range"
    )
    print_caution()


def _say(text: str) -> None:
    console().print(escape(printable(text)), soft_wrap=True)


def _print_runs(fronts: Fronts) -> None:
    words, figures = [], []
    for i, entry in enumerate(fronts.entries):
        run = entry.run
        words.append([entry.name, run.problem.title, stage_in_words(run.problem)])
        joint = f"{int(fronts.joint[i].sum())} of {len(run.front)}"
        shares = [f"{fronts.hypervolumes[i]:.4f}", f"{fronts.alone[i]:.4f}"]
        figures.append([entry.name, *shares, joint, str(run.info.get("evaluations", ""))])
    goals = listing(f"{label(g.measure)} ({g.sense})" for g in fronts.goals)
    print_table(f"{len(words)} runs in {goals}", ["run", "title", "stage"], words, left=3)
    for name, what in fronts.left_out.items():
        _say(f"left out: {name}, {what}")
    headings = ["run", "hypervolume", "alone", "on the joint front", "evaluations"]
    print_table("\nwhat each reaches", headings, figures)
    ends = listing(f"{g.measure.name} {_span(g, low, high)}" for g, low, high in _box(fronts))
    _say(f"hypervolume: share of one box for all, {ends}; {fronts.hypervolume:.4f} together")
    _say("alone: what would be lost of it without the run; on the joint front: designs that no other one beats")


def _box(fronts: Fronts) -> list[tuple[Goal, float, float]]:
    """Return each goal with its worst and best figure in the box of the hypervolume."""
    return [
        (goal, float(goal.value(fronts.reference[i : i + 1])[0]), float(goal.value(fronts.ideal[i : i + 1])[0]))
        for i, goal in enumerate(fronts.goals)
    ]


def _span(goal: Goal, worst: float, best: float) -> str:
    return f"{write(worst, goal.measure.unit)} to {write(best, goal.measure.unit)}"


def _print_differences(fronts: Fronts) -> None:
    found = differences([entry.run.problem for entry in fronts.entries])
    if found:
        rows = [[name, *words] for name, words in found.items() if name != "stage"]
        if rows:
            print_table("\nwhat differs", ["", *fronts.names], rows)
    else:
        _say("stage, process, conditions and limits are the same")


def _print_coverage(fronts: Fronts) -> None:
    rows = [
        [name, *(_percent(fronts.coverage[i, j]) if i != j else "" for j in range(len(fronts.entries)))]
        for i, name in enumerate(fronts.names)
    ]
    title = "\ncoverage: the share of the column's designs that some design of the row's beats or equals"
    print_table(title, ["", *fronts.names], rows)


def _percent(share: float) -> str:
    return f"{100.0 * share:.1f} %"


def _print_level(fronts: Fronts, level: Level) -> None:
    goal, names = level.goal, fronts.names
    others = {g.measure.name: g for g in fronts.goals if g.measure.name != goal.measure.name}
    wanted = f"{goal.measure.name} {BOUND[goal.sense]}"
    for name, other in others.items():
        rows = [
            [_level_in_words(goal, float(at)), *_figures(other, level.best[name][:, k])]
            for k, at in enumerate(level.levels)
        ]
        print_table(f"\n{MOST[other.sense]} {name} with {wanted}", ["", *names], rows)
        _say(f"ahead: {bands_in_words(goal, level.bands[name], names)}")
    if level.together:
        ahead = bands_in_words(goal, level.together, names)
        _say(f"{' and '.join(others)} together, by hypervolume, with {wanted}: {ahead}")


def _level_in_words(goal: Goal, at: float) -> str:
    return "any" if math.isinf(at) else write(at, goal.measure.unit)


def _figures(goal: Goal, values: Array) -> list[str]:
    """Write the figures of one level (R,), the best one, and what is like it, with a star."""
    losses = np.nan_to_num(goal.loss(values), nan=math.inf)
    stars = losses <= losses.min() + SAME[goal.measure.scale]
    return [
        NOBODY if math.isnan(value) else f"{write(float(value), goal.measure.unit)} {'*' if star else ' '}"
        for value, star in zip(values, stars, strict=True)
    ]


def bands_in_words(goal: Goal, bands: Sequence[Band], names: Sequence[str]) -> str:
    """Say who is ahead from the strictest level to the loosest: ``2 uA to 4.1 uA a (to 3 uA alone), above b``."""
    unit, parts = goal.measure.unit, []
    for band in bands:
        who = " and ".join(names[i] for i in band.ahead) + (" alike" if len(band.ahead) > 1 else "")
        if band.alone_to is not None:
            who += " alone" if band.alone_to == band.end else f" (to {write(band.alone_to, unit)} alone)"
        if band.end is not None:
            parts.append(f"{write(band.start, unit)} to {write(band.end, unit)} {who}")
        else:
            parts.append(f"{FURTHER[goal.sense]} {who}" if parts else f"{who} everywhere")
    return ", ".join(parts)


def comparison_record(fronts: Fronts, levels: Sequence[Level]) -> dict[str, Any]:
    """Return the comparison as plain data in SI units."""
    problems = [entry.run.problem for entry in fronts.entries]
    found = differences(problems)
    return {
        "runs": [_run_record(fronts, i) for i in range(len(fronts.entries))],
        "goals": {
            g.measure.name: {"sense": g.sense, "unit": g.measure.unit, "worst": worst, "best": best}
            for g, worst, best in _box(fronts)
        },
        "left_out": dict(fronts.left_out),
        "hypervolume": fronts.hypervolume,
        "differences": {name: dict(zip(fronts.names, words, strict=True)) for name, words in found.items()},
        "coverage": {
            a: {b: float(fronts.coverage[i, j]) for j, b in enumerate(fronts.names) if i != j}
            for i, a in enumerate(fronts.names)
        },
        "levels": {level.goal.measure.name: _level_record(fronts, level) for level in levels},
    }


def _run_record(fronts: Fronts, i: int) -> dict[str, Any]:
    entry = fronts.entries[i]
    front = entry.run.front
    return {
        "name": entry.name,
        "run": str(entry.run.path),
        "title": entry.run.problem.title,
        "stage": stage_in_words(entry.run.problem),
        "designs": len(front),
        "evaluations": entry.run.info.get("evaluations"),
        "hypervolume": float(fronts.hypervolumes[i]),
        "alone": float(fronts.alone[i]),
        "on_joint_front": [int(n) for n in front["design"][fronts.joint[i]]],
    }


def _level_record(fronts: Fronts, level: Level) -> dict[str, Any]:
    names = fronts.names
    return {
        "levels": [None if math.isinf(x) else float(x) for x in level.levels],
        "best": {
            name: {run: [json_number(x) for x in rows[i]] for i, run in enumerate(names)}
            for name, rows in level.best.items()
        },
        "ahead": {name: [_band_record(b, names) for b in bands] for name, bands in level.bands.items()},
        "ahead_together": [_band_record(b, names) for b in level.together],
    }


def _band_record(band: Band, names: Sequence[str]) -> dict[str, Any]:
    return {"from": band.start, "to": band.end, "runs": [names[i] for i in band.ahead], "alone_to": band.alone_to}
