"""How measures move with sizes: against power laws, against sizings moved by hand, and as a designer reads it."""

from __future__ import annotations

import json
import math
from collections.abc import Mapping
from importlib import resources
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from optisize.front.sensitivity import SAME_LINEAR, SAME_RELATIVE, Help, Missed, Sensitivity, missed_limits, sensitivity
from optisize.problem.evaluate import Limit, Problem
from optisize.problem.load import load_sizing
from optisize.process.law import Array
from optisize.quantities import read
from optisize.show.sensitivity import change_text, missed_line, wanted
from optisize.stage.measures import CATALOGUE
from tests.conftest import Cli
from tests.problem.texts import IDEAL, MIRROR, RESISTOR, SIZING, changed, loaded

HANDBOOK = resources.files("optisize.process").joinpath("data", "handbook.toml").read_text(encoding="utf-8")
FLAT = HANDBOOK.replace('"0.08 um/V"', '"0 um/V"').replace('"0.1 um/V"', '"0 um/V"')  # no channel modulation

IDEAL_SIZING = """\
[sizes]
input.width     = "50 um"
input.length    = "2 um"
load.resistance = "20 kohm"
tail.current    = "50 uA"
"""
SINGLE_SIZING = IDEAL_SIZING.replace("tail.current    ", "bias.current    ").replace("50 uA", "10 uA") + (
    'tail.width = "10 um"\ntail.length = "2 um"\ntail.units = 8\n'
)


def flat(text: str) -> str:
    """Return a problem in the square law without channel modulation and without body effect: power laws hold."""
    return changed(
        text,
        ("process", 'process = "flat.toml"'),
        ('output = "single-ended"', 'output = "single-ended"\nbulk = "source"'),
        ("supply", 'supply = "3.3 V"'),
        ("common_mode", 'common_mode = "1.8 V"'),
        ("input.length", 'input.length = ["0.5 um", "10 um"]'),
        *([("tail.length", 'tail.length = ["0.5 um", "10 um"]')] if "tail.length" in text else []),
    )


def of(place: Path, problem_text: str, sizing: str) -> tuple[Problem, dict[str, Array], Sensitivity]:
    """Return a problem, a sizing and its sensitivity."""
    (place / "flat.toml").write_text(FLAT, encoding="utf-8")
    (place / "hand.toml").write_text(sizing, encoding="utf-8")
    problem = loaded(place, problem_text)
    sizes = load_sizing(place / "hand.toml", problem)
    return problem, sizes, sensitivity(problem, sizes)


def row(found: Sensitivity, changes: Array, measure: str) -> dict[str, float]:
    """Return the changes of one measure by the names of the sizes."""
    names = [m.name for m in found.measures]
    return dict(zip([s.name for s in found.sizes], changes[names.index(measure)].tolist(), strict=True))


def test_the_gain_of_the_square_law_follows_its_powers(tmp_path: Path) -> None:
    """Gain is R sqrt(2 K W / L I) / 2, so half a power of each but the resistance."""
    _, _, found = of(tmp_path, flat(changed(IDEAL, ("cmrr", ""))), IDEAL_SIZING)
    powers = {"input.width": 0.5, "input.length": -0.5, "load.resistance": 1.0, "tail.current": 0.5}
    for changes, factor in ((found.more, 1.01), (found.less, 0.99)):
        expected = {name: 20.0 * power * math.log10(factor) for name, power in powers.items()}
        assert row(found, changes, "gain") == pytest.approx(expected, rel=1e-6)
    steps = {"input.width": 50.2 / 50.0, "input.length": 2.05 / 2.0, "load.resistance": 801.0 / 800.0}
    up = row(found, found.up, "gain")
    fingers = dict(zip(powers, found.steps[1] / found.at, strict=True))
    for name, power in powers.items():
        assert up[name] == pytest.approx(20.0 * power * math.log10(1.0 + fingers[name]), rel=1e-6), name
    assert {name: 1.0 + fingers[name] for name in steps} == pytest.approx(steps, rel=1e-9)


def test_currents_are_exact(tmp_path: Path) -> None:
    _, _, found = of(tmp_path, flat(changed(IDEAL, ("cmrr", ""))), IDEAL_SIZING)
    for measure in ("supply_current", "power"):
        assert row(found, found.more, measure) == {**dict.fromkeys(row(found, found.more, measure), 0.0)} | {
            "tail.current": pytest.approx(0.01, rel=1e-9)
        }
        assert row(found, found.less, measure)["tail.current"] == pytest.approx(-0.01, rel=1e-9)
        assert row(found, found.up, measure)["tail.current"] == pytest.approx(0.1 / 50.0, rel=1e-9)
    _, _, found = of(tmp_path, flat(RESISTOR), SINGLE_SIZING)
    more, up, down = (row(found, x, "supply_current") for x in (found.more, found.up, found.down))
    assert more["bias.current"] == pytest.approx(0.01, rel=1e-6)
    assert more["tail.units"] == pytest.approx(0.08 / 9.0, rel=1e-6)  # a fraction of a unit
    assert up["tail.units"] == pytest.approx(1.0 / 9.0, rel=1e-6)
    assert down["tail.units"] == pytest.approx(-1.0 / 9.0, rel=1e-6)
    assert up["bias.current"] == pytest.approx(0.01, rel=1e-6)  # 10.0 uA to 10.1 uA
    assert down["bias.current"] == pytest.approx(-0.001, rel=1e-6)  # 10.0 uA to 9.99 uA, still three digits
    assert found.steps[:, [s.name for s in found.sizes].index("bias.current")] == pytest.approx([-1e-8, 1e-7])


def test_area_is_linear_in_the_length_of_the_resistors(tmp_path: Path) -> None:
    problem, sizes, found = of(tmp_path, RESISTOR, SIZING)
    resistor, grid = problem.process.resistor, problem.process.grid
    area = float(problem.measure(sizes, ["area"])["area"][0])
    per_ohm = 2 * 2 * resistor.width**2 / resistor.sheet_resistance * grid.spacing_factor  # two of them, twice as wide
    step = resistor.sheet_resistance * grid.step / resistor.width
    assert row(found, found.more, "area")["load.resistance"] == pytest.approx(0.01 * 100e3 * per_ohm / area, rel=1e-6)
    assert row(found, found.less, "area")["load.resistance"] == pytest.approx(-0.01 * 100e3 * per_ohm / area, rel=1e-6)
    assert row(found, found.up, "area")["load.resistance"] == pytest.approx(step * per_ohm / area, rel=1e-6)
    assert row(found, found.down, "area")["load.resistance"] == pytest.approx(-step * per_ohm / area, rel=1e-6)
    assert row(found, found.more, "area")["bias.current"] == 0.0


def test_in_weak_inversion_the_gain_follows_the_current_and_not_the_width(tmp_path: Path) -> None:
    sizing = changed(SIZING, ("input.width", 'input.width = "400 um"'), ("bias.current", 'bias.current = "100 nA"'))
    _, _, found = of(tmp_path, RESISTOR, sizing)
    gain, percent = row(found, found.more, "gain"), 20.0 * math.log10(1.01)
    assert gain["load.resistance"] == pytest.approx(percent, rel=0.02)
    assert gain["bias.current"] == pytest.approx(percent, rel=0.02)
    assert abs(gain["input.width"]) < 0.02 * percent


def test_each_change_is_that_of_a_sizing_moved_by_hand(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """One batch for all; one by one gives the same."""
    for text, sizing in ((RESISTOR, SIZING), (MIRROR, SIZING.replace("load.resistance", "load.length").replace(
        '"100 kohm"', '"1 um"\nload.width = "10 um"'))):  # fmt: skip
        problem, sizes, found = of(tmp_path, text, sizing)
        moves = {"less": 0.99 * found.at, "more": 1.01 * found.at, "down": found.at + found.steps[0]}
        moves["up"] = found.at + found.steps[1]
        names = [m.name for m in found.measures]
        for way, targets in moves.items():
            for i, size in enumerate(found.sizes):
                before = problem.measure(sizes, names)
                after = problem.measure({**sizes, size.name: targets[i : i + 1]}, names)
                for k, m in enumerate(found.measures):
                    old, new = before[m.name][0], after[m.name][0]
                    old, new = (abs(old), abs(new)) if m.signed else (old, new)
                    relative = m.scale == "log"
                    expected = new / old - 1.0 if relative else new - old
                    slack = SAME_RELATIVE if relative else SAME_LINEAR * m.step
                    change = getattr(found, way)[k, i]
                    assert change == pytest.approx(expected, rel=1e-6, abs=slack, nan_ok=True), (way, size.name, m.name)
                    assert change == 0.0 or not abs(change) < slack, (way, size.name, m.name)
    calls, whole = [], Problem.measure

    def counted(self: Problem, sizes: Mapping[str, Array], names: Any = None, threads: int = 1) -> dict[str, Array]:
        calls.append({name: len(column) for name, column in sizes.items()})
        return whole(self, sizes, names, threads)

    monkeypatch.setattr(Problem, "measure", counted)
    sensitivity(problem, sizes)
    assert calls == [dict.fromkeys(sizes, 1 + 4 * len(sizes))]


def test_what_cannot_be_drawn_has_no_change(tmp_path: Path) -> None:
    edits = ("tail.units", "tail.units = 1"), ("tail.length", 'tail.length = "0.18 um"')
    problem, _, found = of(tmp_path, RESISTOR, changed(SIZING, *edits))
    units, length = ([s.name for s in found.sizes].index(name) for name in ("tail.units", "tail.length"))
    assert np.isnan(found.steps[0, [units, length]]).all()
    assert np.isnan(found.down[:, [units, length]]).all()
    asked = range(len(problem.needed))
    for changes in (found.less, found.more, found.up):
        assert np.isfinite(changes[asked]).all()
    others = [i for i in range(len(found.sizes)) if i not in (units, length)]
    assert np.isfinite(found.down[np.ix_(asked, others)]).all()


def test_a_jump_is_shown_on_its_side(tmp_path: Path) -> None:
    """20 um are two of the widest fingers; any more is drawn with four, on less area, so both ways make it smaller."""
    _, _, found = of(tmp_path, RESISTOR, SIZING)
    less, more, down, up = (
        row(found, x, "area")["input.width"] for x in (found.less, found.more, found.down, found.up)
    )
    assert less < down < 0.0
    assert up < more < 0.0


def test_a_signed_figure_changes_by_its_magnitude(tmp_path: Path) -> None:
    problem, sizes, found = of(tmp_path, RESISTOR, SIZING)
    at = [m.name for m in found.measures].index("common_mode_gain")
    assert found.values[at] < 0.0
    more = problem.measure({**sizes, "load.resistance": np.array([101e3])}, ["common_mode_gain"])["common_mode_gain"]
    change = row(found, found.more, "common_mode_gain")["load.resistance"]
    assert change == pytest.approx(-more[0] + found.values[at], rel=1e-6)
    assert change > 0.0


def test_goals_come_first_then_limits_then_what_else_is_finite(tmp_path: Path) -> None:
    text = changed(IDEAL, ("cmrr", ""), ("supply_current", 'supply_current = "min"\ninput.p.gm = "max"'))
    _, _, found = of(tmp_path, text, IDEAL_SIZING.replace("20 kohm", "10 kohm"))
    names = [m.name for m in found.measures]
    assert names[:3] == ["gain", "supply_current", "input.p.gm"]
    assert names[3:8] == ["power", "output_swing", "headroom", "area", "bandwidth"]
    assert [name for name in names if "." in name] == ["input.p.gm"]
    assert "cmrr" not in names  # unlimited
    assert set(names[8:]) <= set(CATALOGUE)
    assert np.isfinite(found.values).all()
    text = changed(text, ("power", 'cmrr = { min = "40 dB" }'))
    _, _, found = of(tmp_path, text, IDEAL_SIZING)
    assert row(found, found.more, "cmrr") == dict.fromkeys((s.name for s in found.sizes), 0.0)


MISSING = changed(
    RESISTOR,
    ("power", 'power = { max = "9 uW" }'),
    ("headroom", 'headroom = { min = "0.35 V" }'),
    ("output_swing", 'output_swing = { max = "10 mV" }'),
    ("bandwidth", 'bandwidth = { min = "20 MHz" }'),
    ("area", 'area = { max = "100 um^2" }\ncommon_mode_gain = { max = "0.001 V/V" }'),
    ("[search]", '[limits.gain]\nmin = "10 dB"\nmax = "90 dB"\n[search]'),
    ("input.length", 'input.length = "0.5 um"'),
    ("tail.width", 'tail.width = ["1 um", "5 um"]'),
)


def test_what_helps_a_missed_limit_is_what_brute_force_finds(tmp_path: Path) -> None:
    problem, sizes, found = of(tmp_path, MISSING, SIZING)
    missed = missed_limits(problem, found)
    assert [(x.measure.name, x.kind) for x in missed] == [
        ("power", "max"), ("output_swing", "max"), ("headroom", "min"), ("area", "max"), ("common_mode_gain", "max"),
        ("bandwidth", "min"), ("gain", "min"),
    ]  # fmt: skip
    for x in missed:
        limit = Limit(x.measure, *((x.bound, None) if x.kind == "min" else (None, x.bound)))
        name = x.measure.name
        start = float(limit.violation(problem.measure(sizes, [name])[name])[0])
        better = {}
        for size in problem.topology.size_names:
            gained = {}
            for percent in (-1, 1):
                moved = {**sizes, size: sizes[size] * (1.0 + 0.01 * percent)}
                gained[percent] = start - float(limit.violation(problem.measure(moved, [name])[name])[0])
            if size == "tail.width":
                del gained[1]  # at the end of its range
            most = max(gained, key=gained.__getitem__)
            if size != "input.length" and gained[most] > SAME_LINEAR:  # which the problem fixes
                better[size, most] = gained[most]
        best = sorted(better, key=lambda key: -better[key])
        assert [(h.size, h.percent) for h in x.helps][: len(best)] == best, name
        assert "input.length" not in {h.size for h in x.helps}
        value = abs(float(problem.measure(sizes, [name])[name][0]))
        assert (x.value, x.by) == (value, pytest.approx(abs(x.bound - value)))


def test_a_size_off_the_value_that_the_problem_fixes_may_go_there(tmp_path: Path) -> None:
    longer = changed(SIZING, ("input.length", 'input.length = "0.6 um"'))
    problem, _, found = of(tmp_path, MISSING, longer)
    ways = {(h.size, h.percent) for x in missed_limits(problem, found) for h in x.helps}
    assert ("input.length", -1) in ways
    assert ("input.length", 1) not in ways


def test_met_limits_are_not_missed(tmp_path: Path) -> None:
    problem, _, found = of(tmp_path, changed(RESISTOR, ("gain", 'gain = "max"')), SIZING)
    report = {x.measure.name for x in missed_limits(problem, found)}
    values = dict(zip([m.name for m in found.measures], found.values, strict=True))
    assert report == {x.measure.name for x in problem.limits if not x.met(np.array([values[x.measure.name]]))[0]}


def test_lines_say_how_far_and_what_helps() -> None:
    headroom, power, gain = CATALOGUE["headroom"], CATALOGUE["power"], CATALOGUE["common_mode_gain"]
    helps = Help("tail.length", -1, 3e-4), Help("input.width", 1, 2e-4), Help("a", 1, 1.9e-4), Help("b", 1, 1.8e-4)
    assert missed_line(Missed(headroom, "min", 0.05, 0.038, helps)) == (
        "headroom is missed by 12 mV: tail.length -1 % helps most (+300 uV), input.width +1 % (+200 uV), "
        "a +1 % (+190 uV)"
    )
    assert missed_line(Missed(headroom, "min", 0.05, 0.038, ())) == (
        "headroom is missed by 12 mV: no size helps by itself within its range"
    )
    helps = Help("bias.current", -1, -0.00998), Help("tail.width", -1, -2e-5)
    assert missed_line(Missed(power, "max", 6e-5, 8e-5, helps)) == (
        "power is missed by 20 uW, 25 % of its 80 uW: bias.current -1 % helps most (-0.998 %)"
    )
    for value, word in ((math.nan, "undefined"), (math.inf, "unlimited")):
        assert missed_line(Missed(gain, "max", 0.1, value, ())) == (
            f"common_mode_gain (max 0.1 V/V) is missed: it is {word}"
        )


def test_changes_have_a_sign_and_a_unit(tmp_path: Path) -> None:
    gain, headroom, power = CATALOGUE["gain"], CATALOGUE["headroom"], CATALOGUE["power"]
    assert change_text(gain, 0.0841) == "+0.0841 dB"
    assert change_text(headroom, -1.234e-3) == "-1.23 mV"
    assert change_text(power, 0.005) == "+0.5 %"
    assert change_text(power, -0.0123456) == "-1.23 %"
    assert change_text(power, 0.0) == change_text(gain, 0.0) == "0"
    assert change_text(power, math.nan) == change_text(gain, math.nan) == "undefined"
    assert change_text(power, math.inf) == change_text(gain, math.inf) == "+unlimited"
    assert change_text(gain, -math.inf) == "-unlimited"
    problem = loaded(tmp_path, changed(RESISTOR, ("area", 'gain = { min = "10 dB", max = "30 dB" }')))
    said = [wanted(problem, CATALOGUE[name]) for name in ("cmrr", "gain", "headroom", "power", "slew_rate")]
    assert said == ["max", "max, >= 10 dB, <= 30 dB", ">= 50 mV", "<= 60 uW", "max"]


def test_the_tables_are_those_of_json(cli: Cli) -> None:
    Path("stage.toml").write_text(MISSING, encoding="utf-8")
    Path("hand.toml").write_text(changed(SIZING, ("tail.units", "tail.units = 1")), encoding="utf-8")
    words = ("assess", "stage.toml", "hand.toml", "--sensitivity")
    plain, shown, printed = cli(*words[:3]), cli(*words), cli(*words, "--json")
    assert (shown.exit_code, printed.exit_code) == (0, 0), shown.stderr
    caution = plain.stdout.splitlines()[-1]
    assert shown.stdout.startswith(plain.stdout.removesuffix(f"{caution}\n"))
    assert shown.stdout.splitlines()[-1] == caution
    record = json.loads(printed.stdout, parse_constant=lambda text: pytest.fail(text))["sensitivity"]
    percent, step = tables(shown.stdout)
    sizes = [s["name"] for s in record["sizes"]]
    steps = {s["name"]: s["step_up"] for s in record["sizes"]}
    assert list(percent[0]) == ["measure", "now", *sizes]
    assert [h.split(" +")[0] for h in step[0]] == ["measure", "now", *sizes]
    for name, heading in zip(sizes, list(step[0])[2:], strict=True):
        unit = next(s["unit"] for s in record["sizes"] if s["name"] == name)
        assert read(heading.split(" +")[1], unit) == pytest.approx(steps[name], rel=1e-3)
    for table, side in ((percent, "plus_1_percent"), (step, "step_up")):
        assert len(table) == len(record["measures"])
        for line, m in zip(table, record["measures"], strict=True):
            assert line["measure"].endswith(f"({m['wanted']})")
            assert line["measure"].startswith("|" if m["of_magnitude"] else m["name"])
            value = abs(m["value"]) if m["of_magnitude"] else m["value"]
            assert read(line["now"], m["unit"]) == pytest.approx(value, rel=1e-3, abs=1e-30)
            for name, cell in zip(sizes, list(line.values())[2:], strict=True):
                unit = "" if m["change"] == "relative" else m["unit"]
                if cell == "undefined":
                    assert m[side][name] is None, (m["name"], name)
                else:
                    value = 0.0 if cell == "0" else read(cell, unit)
                    assert value == pytest.approx(m[side][name], rel=6e-3, abs=1e-30), (m["name"], name)
    assert next(s for s in record["sizes"] if s["name"] == "tail.units")["step_down"] is None
    assert all(m["step_down"]["tail.units"] is None for m in record["measures"])
    lines = shown.stdout.splitlines()
    for x in record["missed"]:
        (line,) = (text for text in lines if text.startswith(f"{x['name']} is missed by "))
        assert not x["helps"] or f"{x['helps'][0]['size']} {x['helps'][0]['percent']:+d} % helps most" in line
    assert "sensitivity" not in json.loads(cli(*words[:3], "--json").stdout)


def tables(text: str) -> list[list[dict[str, str]]]:
    """Return the two tables of changes, each row by its headings."""
    found = []
    for title in ("change for +1 % of each size alone", "change for one step up of each size alone"):
        lines = text.split(f"\n{title}\n")[1].split("\n\n")[0].splitlines()
        headings = cells(lines[0])
        found.append([dict(zip(headings, cells(line), strict=True)) for line in lines[1:]])
    return found


def cells(line: str) -> list[str]:
    return [cell.strip() for cell in line.split("  ") if cell.strip()]


def test_a_step_that_cannot_be_taken_is_said(cli: Cli) -> None:
    Path("stage.toml").write_text(RESISTOR, encoding="utf-8")
    Path("hand.toml").write_text(changed(SIZING, ("tail.length", 'tail.length = "20 um"')), encoding="utf-8")
    result = cli("assess", "stage.toml", "hand.toml", "--sensitivity")
    assert result.exit_code == 0, result.stderr
    _, step = tables(result.stdout)
    assert {line["tail.length (no step)"] for line in step} == {"undefined"}
