"""The table of measures: parameters by name, the same measure twice, and one clear message for whatever is wrong.

The measures with parameters are the tests' own, whatever the catalogue has.
"""

from __future__ import annotations

import tomllib
from pathlib import Path

import numpy as np
import pytest

from optisize.errors import InputError
from optisize.problem.evaluate import Problem
from optisize.problem.own_measures import in_file, label, origin, own_measures
from optisize.problem.schema import ProblemFile
from optisize.stage.measures import CATALOGUE
from tests.conftest import Cli
from tests.problem.test_bad_input import refused
from tests.problem.texts import IDEAL, RESISTOR, changed, loaded

pytestmark = pytest.mark.usefixtures("humming")

TABLE = """\
[measures]
hum      = { frequency = "10 Hz" }
wideband = { of = "hum", frequency = "100 kHz" }
usual    = { of = "hum" }
loud_2   = { of = "hum_total", band = ["10 Hz", "1 kHz"] }
odd      = { of = "unlikeness", sigmas = 2 }
"""


def with_measures(*lines: str) -> str:
    """The problem with resistors and a table of measures."""
    return changed(RESISTOR, ("[goals]", "\n".join(["[measures]", *lines, "", "[goals]"])))


@pytest.fixture
def problem(tmp_path: Path) -> Problem:
    text = changed(RESISTOR, ("[goals]", f"{TABLE}\n[goals]"), ("cmrr", 'wideband = "min"'))
    return loaded(tmp_path, changed(text, ("power", 'hum = { max = "50 uV/√Hz" }')))


def test_a_measure_is_taken_where_the_problem_says(problem: Problem) -> None:
    assert [g.measure.name for g in problem.goals] == ["gain", "wideband", "supply_current"]
    assert {name: m.taken_at for name, m in problem.own_measures.items()} == {
        "hum": {"frequency": 10.0},
        "wideband": {"frequency": 1e5},
        "usual": {"frequency": 1e3},
        "loud_2": {"band": (10.0, 1e3)},
        "odd": {"sigmas": 2.0, "frequency": 1e6},
    }
    limit = next(x for x in problem.limits if x.measure.name == "hum")
    assert limit.measure.taken_at == {"frequency": 10.0}
    assert limit.high == 50e-6
    assert problem.goals[1].measure is problem.find("wideband")


def test_the_same_measure_at_two_frequencies_has_two_values(problem: Problem) -> None:
    sizes = problem.space.decode(np.random.default_rng(1).random((problem.space.dimensions, 30)))
    values = problem.measure(sizes, ["hum", "wideband", "usual", "loud_2", "gain"])
    np.testing.assert_allclose(values["hum"] / values["usual"], np.sqrt(101.0 / 2.0), rtol=1e-12)
    np.testing.assert_allclose(values["wideband"] / values["usual"], np.sqrt(1.01 / 2.0), rtol=1e-12)
    np.testing.assert_allclose(values["loud_2"] / values["usual"], np.sqrt(990.0), rtol=1e-12)
    assert list(problem.assess(sizes).losses.shape) == [3, 30]


def test_what_the_problem_does_not_name_keeps_its_defaults(problem: Problem, tmp_path: Path) -> None:
    assert problem.find("hum_total") is CATALOGUE["hum_total"]
    assert problem.find("gain") is CATALOGUE["gain"]
    assert problem.find("input.p.gm").name == "input.p.gm"
    assert loaded(tmp_path, RESISTOR).own_measures == {}
    plain = loaded(tmp_path, changed(RESISTOR, ("cmrr", 'hum = "min"')))
    assert plain.goals[1].measure.taken_at == {"frequency": 1e3}


def test_an_unknown_measure_is_told_the_nearest_of_its_own(problem: Problem) -> None:
    with pytest.raises(InputError, match='did you mean "wideband"'):
        problem.find("wideban")


def test_every_way_to_write_a_table_is_the_same(tmp_path: Path) -> None:
    ways = (
        ['hum = { frequency = "20 Hz" }', 'other = { of = "hum_total", band = ["1 Hz", "2 Hz"] }'],
        ["hum.frequency = 20", 'other.of = "hum_total"', "other.band = [1, 2]"],
        ["[measures.hum]", "frequency = 0.02e3", "[measures.other]", "band = ['1Hz', 2.0]", "of = 'hum_total'"],
        ['hum = { of = "hum", frequency = "20 Hz" }', '"other" = { of = "hum_total", band = [1.0, "0.002 kHz"] }'],
    )
    tables = [loaded(tmp_path, with_measures(*lines)).own_measures for lines in ways]
    assert all(table == tables[0] for table in tables[1:])
    assert tables[0]["other"].taken_at == {"band": (1.0, 2.0)}


def test_the_bounds_of_a_parameter_are_allowed(tmp_path: Path) -> None:
    lines = ['hum = { frequency = "1 mHz" }', 'odd = { of = "unlikeness", sigmas = 0, frequency = "1 THz" }']
    table = loaded(tmp_path, with_measures(*lines)).own_measures
    assert table["hum"].taken_at == {"frequency": 1e-3}
    assert table["odd"].taken_at == {"sigmas": 0.0, "frequency": 1e12}


def test_a_table_may_be_empty(tmp_path: Path) -> None:
    assert loaded(tmp_path, with_measures()).own_measures == {}
    assert loaded(tmp_path, with_measures("hum = {}")).find("hum").taken_at == {"frequency": 1e3}


BAD = {
    "no table": ('hum = "10 Hz"', ["measures.hum: ", 'found "10 Hz"', '{ frequency = "1 kHz" }']),
    "list": ("hum = [10]", ["measures.hum: ", "found [10]", "a table is needed"]),
    "band without a table": ("hum_total = 3", ["measures.hum_total: ", "found 3", '{ band = ["1 Hz", "100 kHz"] }']),
    "count without a table": ("unlikeness = 3", ["measures.unlikeness: ", "{ sigmas = 3 }"]),
    "unknown": ("humm = { frequency = 1 }", ["measures.humm: no measure", "of = ", 'mean "hum"?']),
    "own without of": ("wideband = { frequency = 1 }", ["measures.wideband: no measure", "needs of = "]),
    "no parameters": ("gain = { frequency = 1 }", ["measures.gain: has no parameters", "hum, hum_total, unlikeness"]),
    "of nothing": ('own = { of = "hun" }', ["measures.own.of: ", 'found "hun"', 'mean "hum"?']),
    "of a size": ('own = { of = "input.width" }', ["measures.own.of: ", '"input.width"', "hum, hum_total"]),
    "of a figure": ('own = { of = "input.p.gm" }', ["measures.own.of: ", '"input.p.gm"']),
    "of another own": ('a = { of = "hum" }\nb = { of = "a" }', ["measures.b.of: ", 'found "a"']),
    "of number": ("own = { of = 3 }", ["measures.own.of: ", "found 3", "name of a measure"]),
    "of list": ('own = { of = ["hum"] }', ["measures.own.of: ", 'found ["hum"]']),
    "of without parameters": ('own = { of = "gain" }', ["measures.own.of: ", '"gain"', "it has no parameters", "hum"]),
    "catalogue name": ('gain = { of = "hum" }', ["measures.gain: is a measure of the catalogue already"]),
    "other catalogue name": ('hum_total = { of = "hum" }', ["measures.hum_total: is a measure of the catalogue"]),
    "capital": ('Own = { of = "hum" }', ["measures.Own: a name begins with a small letter"]),
    "digit": ('2nd = { of = "hum" }', ["measures.2nd: a name begins with"]),
    "dot": ('"a.b" = { of = "hum" }', ["measures.a.b: a name begins with"]),
    "letters": ('"größe" = { of = "hum" }', ["measures.größe: a name begins with"]),
    "empty name": ('"" = { of = "hum" }', ["measures.: a name begins with"]),
    "escape": ('"a\\u001b[31m" = { of = "hum" }', ['the key "a?[31m"']),
    "long": (f'{"a" * 41} = {{ of = "hum" }}', ["measures.aaaa", "at most 40 characters"]),
    "group": ('tail = { of = "hum" }', ["measures.tail: is the name of a part of the stage"]),
    "other group": ('bias = { of = "hum" }', ["measures.bias: is the name of a part of the stage"]),
    "column": ('design = { of = "hum" }', ["measures.design: is the name of a column of the front"]),
    "key": ('hum = { freqency = "1 Hz" }', ["measures.hum.freqency: unknown key", "of, frequency", '"frequency"?']),
    "key of another": ('own = { of = "hum", band = [1, 2] }', ["measures.own.band: unknown key", "of, frequency"]),
    "deep": ('hum = { frequency = { value = "1 Hz" } }', ["measures.hum.frequency: ", '"value"', '"1 MHz"']),
    "unit": ('hum = { frequency = "10 V" }', ["measures.hum.frequency: ", '"10 V"', '"1 MHz"']),
    "no unit": ('hum = { frequency = "10" }', ["measures.hum.frequency: ", "has no unit"]),
    "boolean": ("hum = { frequency = true }", ["measures.hum.frequency: ", "found true"]),
    "not finite": ("hum = { frequency = inf }", ["measures.hum.frequency: ", "finite"]),
    "low": ('hum = { frequency = "0 Hz" }', ["measures.hum.frequency: ", '"0 Hz"', "at least 1 mHz"]),
    "high": ("hum = { frequency = 2e12 }", ["measures.hum.frequency: ", "at most 1 THz (a bare number is in Hz)"]),
    "pair for one": ("hum = { frequency = [1, 2] }", ["measures.hum.frequency: ", "found [1, 2]", "a quantity"]),
    "one for a pair": ('hum_total = { band = "1 Hz" }', ["measures.hum_total.band: ", '["1 Hz", "100 kHz"]']),
    "three": ("hum_total = { band = [1, 2, 3] }", ["measures.hum_total.band: ", "[1, 2, 3]", "two values"]),
    "inverted": ('hum_total = { band = ["2 Hz", "1 Hz"] }', ["measures.hum_total.band: ", "below the second"]),
    "empty band": ("hum_total = { band = [5, 5] }", ["measures.hum_total.band: ", "found [5, 5]", "below the second"]),
    "band low": ("hum_total = { band = [0, 5] }", ["measures.hum_total.band: ", "found [0, 5]", "at least 1 mHz"]),
    "band unit": ('hum_total = { band = ["1 Hz", "5 V"] }', ["measures.hum_total.band: ", '"5 V"]', '"V"']),
    "nested": ("hum_total = { band = [[1], [2]] }", ["measures.hum_total.band: ", "found [[1], [2]]"]),
    "count unit": ('unlikeness = { sigmas = "3 V" }', ["measures.unlikeness.sigmas: ", '"3 V"', "a plain number"]),
    "count high": ("unlikeness = { sigmas = 11 }", ["unlikeness.sigmas: ", "found 11; it must be at most 10\n"]),
}  # fmt: skip


@pytest.mark.parametrize("case", BAD)
def test_a_mistake_in_the_table_is_one_clear_message(cli: Cli, case: str) -> None:
    lines, expected = BAD[case]
    Path("stage.toml").write_text(with_measures(lines), encoding="utf-8")
    refused(cli, "optisize: stage.toml: ", *expected)


def test_a_goal_or_limit_is_told_the_nearest_name_of_the_problem(cli: Cli) -> None:
    text = with_measures('wideband = { of = "hum" }')
    Path("stage.toml").write_text(changed(text, ("gain", 'wideban = "min"')), encoding="utf-8")
    refused(cli, "goals.wideban: no measure", '"wideband"?')
    Path("stage.toml").write_text(changed(text, ("power", "wideband = { max = 1, mn = 2 }")), encoding="utf-8")
    refused(cli, "limits.wideband.mn: unknown key")
    Path("stage.toml").write_text(changed(text, ("power", 'wideband = { max = "20 nV" }')), encoding="utf-8")
    refused(cli, "limits.wideband.max: ", 'found "20 nV"', '"20 nV/√Hz"')
    Path("stage.toml").write_text(changed(RESISTOR, ("power", "wideband = { max = 1 }")), encoding="utf-8")
    refused(cli, "limits.wideband: no measure")


def test_a_part_of_another_stage_lends_its_name(tmp_path: Path) -> None:
    text = changed(IDEAL, ("cmrr", ""), ("[goals]", '[measures]\nbias = { of = "hum" }\n[goals]'))
    assert loaded(tmp_path, text).find("bias").taken_at == {"frequency": 1e3}


def test_a_measure_with_settings_is_called_by_them(problem: Problem) -> None:
    shown = {name: label(problem.find(name)) for name in (*problem.own_measures, "hum_total", "gain", "input.p.gm")}
    assert shown == {
        "hum": "hum (at 10 Hz)",
        "wideband": "wideband (hum at 100 kHz)",
        "usual": "usual (hum at 1 kHz)",
        "loud_2": "loud_2 (hum_total 10 Hz to 1 kHz)",
        "odd": "odd (unlikeness sigmas = 2, at 1 MHz)",
        "hum_total": "hum_total (1 Hz to 100 kHz)",
        "gain": "gain",
        "input.p.gm": "input.p.gm",
    }
    assert label(problem.find("hum").at("low", {"frequency": 0.0})) == "low (hum at DC)"
    assert [origin(problem.find(name)) for name in ("wideband", "hum", "input.p.gm")] == ["hum", "hum", "input.p.gm"]


HERE = ("hum", "hum_total", "unlikeness")


@pytest.mark.parametrize("name", [*HERE, *(name for name, m in CATALOGUE.items() if m.parameters)])
def test_the_defaults_of_the_catalogue_can_be_written_in_a_problem(name: str, problem: Problem) -> None:
    measure = CATALOGUE[name]
    lines = ", ".join(f"{p.name} = {in_file(p, p.default)}" for p in measure.parameters)
    table = tomllib.loads(f'own = {{ of = "{name}", {lines} }}')
    assert own_measures(table, problem.topology)["own"].taken_at == measure.taken_at


def test_the_schema_says_which_keys_there_are() -> None:
    table = ProblemFile.model_json_schema()["properties"]["measures"]
    assert "of" in table["description"]
    assert table["propertyNames"]["maxLength"] == 40
