"""Whatever is wrong with a file: one short message with the file, the key, what was found, what is allowed, the nearest
valid name; exit code 2, nothing on stdout, no traceback and nothing written.
"""

from __future__ import annotations

import random
from pathlib import Path

import pytest
from typer.testing import Result

from tests.conftest import Cli
from tests.problem.texts import IDEAL, MIRROR, PROCESS, RESISTOR, SIZING, changed

CASES = {
    # a word that is not known, and the one that was meant
    "goal": (("gain", 'gian = "max"'), ["goals.gian", '"gain"?']),
    "goal sense": (("gain", 'gain = "maximise"'), ["goals.gain", '"maximise"', '"min"', 'mean "max"?']),
    "goal true": (("gain", "gain = true"), ["goals.gain", "found true", '"max" and "min"']),
    "goal list": (("gain", 'gain = ["max"]'), ["goals.gain", '["max"]']),
    "goal table": (("gain", 'gain = { sense = "max" }'), ["goals.gain:", '{"sense": "max"}']),
    "goal empty table": (("gain", "gain = {}"), ["goals.gain:", "found {}"]),
    "goal is a size": (("gain", 'input.width = "max"'), ["goals.input.width", "a size, not a measure"]),
    "goal of a transistor": (("gain", 'input.p.gmm = "max"'), ["goals.input.p.gmm", '"input.p.gm"?']),
    "goal garbage": (("gain", 'gain.a.b = "max"'), ["goals.gain:", "max"]),
    "goal letters": (("gain", '"gäin" = "max"'), ["goals.gäin", '"gain"?']),
    "goals empty": (("gain", ""), ("cmrr", ""), ("supply_current", ""), ["goals", "there is none"]),
    "goals missing": (("[goals]", "[search]"), ("[search]\npop", "[goals]\npop"), ["search.gain: unknown key"]),
    "size": (("input.width", "input.widht = 1"), ["sizes.input.widht", "load.resistance", '"input.width"?']),
    "size group": (("input.width", "inptu.width = 1"), ["sizes.inptu.width", '"input.width"?']),
    "size of another tail": (("single\"", "ideal\""), ["sizes.tail.width", "tail ideal", '"tail.current"?']),
    "size twice": (("[goals]", '"input.width" = "3 um"\n[goals]'), ["sizes.input.width", "twice"]),
    "size missing": (("input.width", ""), ["sizes.input.width", "is missing"]),
    "limit": (("bandwidth", 'bandwith = { min = "1 MHz" }'), ["limits.bandwith", '"bandwidth"?']),
    "limit of a transistor": (("bandwidth", 'inputp.gm = { min = "1 uS" }'), ["limits.inputp.gm", '"input.p.gm"?']),
    "limit bare": (("bandwidth", 'bandwidth = "1 MHz"'), ["limits.bandwidth", '{ min = "1 MHz" }']),
    "limit empty": (("bandwidth", "bandwidth = {}"), ["limits.bandwidth", "found {}", "min"]),
    "limit list": (("bandwidth", "bandwidth = [1, 2]"), ["limits.bandwidth", "found [1, 2]"]),
    "limit key": (("bandwidth", 'bandwidth = { mn = "1 MHz" }'), ["limits.bandwidth.mn", 'mean "min"?']),
    "limit two keys": (("bandwidth", "bandwidth = { min = 1, mx = 2 }"), ["limits.bandwidth.mx", 'mean "max"?']),
    "limit deep": (("bandwidth", "bandwidth = { min = { value = 1 } }"), ["limits.bandwidth.min", '"value"']),
    "limit negative": (("bandwidth", 'bandwidth = { min = "-1 MHz" }'), ["limits.bandwidth.min", "above zero"]),
    "limit inverted": (("bandwidth", "bandwidth = { min = 2, max = 1 }"), ["limits.bandwidth", "inverted"]),
    "limit margin alone": (("bandwidth", 'bandwidth = { margin = "1 %" }'), ["limits.bandwidth", "min"]),
    "limit margin unit": (
        ("bandwidth", 'bandwidth = { min = "1 MHz", margin = "1 mV" }'),
        ["limits.bandwidth.margin", '"1 mV"', '"1 MHz"'],
    ),
    "limit margin too wide": (
        ("bandwidth", 'bandwidth = { min = "1 MHz", margin = "100 %" }'),
        ["limits.bandwidth.margin", '"100 %"', "less than the bound"],
    ),
    "limit margin negative": (
        ("headroom", 'headroom = { min = "50 mV", margin = "-1 mV" }'),
        ["limits.headroom.margin", '"-1 mV"', "zero"],
    ),
    "limit margin leaves nothing": (
        ("headroom", 'headroom = { min = "50 mV", max = "60 mV", margin = "6 mV" }'),
        ["limits.headroom.margin", '"6 mV"', "nothing between"],
    ),
    "limit unit": (("bandwidth", 'bandwidth = { min = "1 V" }'), ["limits.bandwidth.min", '"1 V"', '"1 MHz"']),
    "limit ratio": (("bandwidth", 'gain = { min = "100" }'), ["limits.gain.min", "no unit", '"40 dB"']),
    "limit prefix": (("bandwidth", 'bandwidth = { min = "1 mhz" }'), ["limits.bandwidth.min", "mhz", '"1 MHz"']),
    "limits in search": (("seed", "power = { max = 1 }"), ["search.power: unknown key", "population"]),
    # ranges and numbers
    "inverted": (("input.width", 'input.width = ["400 um", "2 um"]'), ["sizes.input.width", "inverted"]),
    "three": (("input.width", "input.width = [1, 2, 3]"), ["sizes.input.width", "[1, 2, 3]", "range of two"]),
    "one in a list": (("input.width", 'input.width = ["2 um"]'), ["sizes.input.width", "range of two"]),
    "no value": (("input.width", "input.width = []"), ["sizes.input.width", "found []"]),
    "range as table": (("input.width", "input.width = { min = 1, max = 2 }"), ["sizes.input.width:", "range of two"]),
    "nested list": (("input.width", "input.width = [[1], [2]]"), ["sizes.input.width", "found [1]"]),
    "negative": (("input.width", 'input.width = "-2 um"'), ["sizes.input.width", '"-2 um"', "above zero"]),
    "zero": (("input.width", "input.width = 0"), ["sizes.input.width", "above zero"]),
    "boolean": (("input.width", "input.width = true"), ["sizes.input.width", "found true"]),
    "date": (("input.width", "input.width = 1979-05-27"), ["sizes.input.width:", "1979-05-27"]),
    "not a number": (("input.width", "input.width = nan"), ["sizes.input.width", "finite"]),
    "large integer": (("input.width", f"input.width = 1{'0' * 400}"), ["sizes.input.width", "finite"]),
    "larger integer": (("input.width", f"input.width = 1{'0' * 5000}"), ["not valid TOML", "4300 digits"]),
    "huge exponent": (("input.width", 'input.width = "1e999999999999999999999 um"'), ["sizes.input.width", "finite"]),
    "huge power": (("input.width", 'input.width = "1 km^99999"'), ["sizes.input.width", "is not a unit"]),
    "unit": (("input.width", 'input.width = "2 V"'), ["sizes.input.width", '"2 V"', '"m"', '"1.2 um"']),
    "no unit": (("input.width", 'input.width = "2"'), ["sizes.input.width", "no unit", '"1.2 um"']),
    "unknown unit": (("input.width", 'input.width = "2 microns"'), ["sizes.input.width", "microns", '"1.2 um"']),
    "decimal comma": (("input.width", 'input.width = "2,5 um"'), ["sizes.input.width", '"2,5 um"', "decimal point"]),
    "bare numbers": (("input.width", "input.width = [2, 400]"), ["sizes.input.width", "440 nm", "in m"]),
    "escape": (("input.width", 'input.width = "1 \\u001b[31mx"'), ["sizes.input.width", "?[31mx"]),
    "below the grid": (("input.length", 'input.length = ["0.1 um", "4 um"]'), ["input.length", "180 nm to 20 um"]),
    "narrow": (("input.width", 'input.width = "0.3 um"'), ["sizes.input.width", "440 nm"]),
    "too long": (("input.length", 'input.length = "4 mm"'), ["sizes.input.length", "20 um"]),
    "resistance": (("load.resistance", 'load.resistance = "1 mohm"'), ["sizes.load.resistance", "5 ohm"]),
    "current": (("bias.current", 'bias.current = "20 A"'), ["sizes.bias.current", "1 pA to 10 A"]),
    "units fraction": (("tail.units", "tail.units = [1.5, 16]"), ["sizes.tail.units", "whole"]),
    "units text": (("tail.units", 'tail.units = "four"'), ["sizes.tail.units", "is not a number"]),
    "units with unit": (("tail.units", 'tail.units = "4 um"'), ["sizes.tail.units", '"um"', "plain number"]),
    "units none": (("tail.units", "tail.units = 0"), ["sizes.tail.units", "above zero"]),
    # the table of measures; what is wrong inside it has tests of its own
    "measures array": (("[goals]", "[[measures]]\n[goals]"), ["measures:", "a table is needed"]),
    "measures name": (("[goals]", "[measurs]\n[goals]"), ["measurs: unknown key", '"measures"?']),
    # the other tables
    "stage word": (("input", 'input = "npn"'), ["stage.input", '"npn"', "nmos, pmos"]),
    "stage near": (("tail", 'tail = "singel"'), ["stage.tail", 'mean "single"?']),
    "stage boolean": (("input", "input = true"), ["stage.input", "found true"]),
    "stage list": (("input", 'input = ["nmos"]'), ["stage.input", '["nmos"]']),
    "stage missing": (("load", ""), ["stage.load", "is missing"]),
    "stage key": (("load", 'laod = "resistor"'), ["stage.laod: unknown key", '"load"?']),
    "stage array": (("[stage]", "[[stage]]"), ["stage:", "a table is needed"]),
    "stage name": (("[stage]", "[stages]"), ["stages: unknown key", '"stage"?']),
    "sizes array": (("[sizes]", "[[sizes]]"), ["sizes:", "a table is needed"]),
    "mode high": (("common_mode", 'common_mode = ["0.9 V", "2.1 V"]'), ["conditions.common_mode", "2.1 V", "1.8 V"]),
    "mode low": (("common_mode", 'common_mode = "-0.1 V"'), ["conditions.common_mode", "found -100 mV;", "rails"]),
    "mode inverted": (("common_mode", 'common_mode = ["1.1 V", "0.9 V"]'), ["conditions.common_mode", "inverted"]),
    "mode unit": (("common_mode", 'common_mode = "1 A"'), ["conditions.common_mode", '"1 A"', '"V"']),
    "supply unit": (("supply", 'supply = "1.8 A"'), ["conditions.supply", '"1.8 A"', '"1.8 V"']),
    "supply negative": (("supply", 'supply = "-1.8 V"'), ["conditions.supply", '"-1.8 V"', "above 0 V"]),
    "supply large": (("supply", 'supply = "1.8 kV"'), ["conditions.supply", "at most 100 V"]),
    "supply comma": (("supply", 'supply = "1,8 V"'), ["conditions.supply", "decimal point"]),
    "supply key": (("supply", 'suply = "1.8 V"'), ["conditions.suply: unknown key", '"supply"?']),
    "temperature bare": (("temperature", "temperature = 27"), ["conditions.temperature", "above 150 K", "in K"]),
    "temperature unit": (("temperature", 'temperature = "27 C"'), ["conditions.temperature", '"27 degC"']),
    "corner": (("temperature", 'corner = "slwo"'), ["conditions.corner", '"slwo"', "typical", 'mean "slow"?']),
    "seed text": (("seed", 'seed = "seven"'), ["search.seed", '"seven"', "whole number"]),
    "seed quoted": (("seed", 'seed = "7"'), ["search.seed", '"7"', "whole number"]),
    "seed fraction": (("seed", "seed = 1.5"), ["search.seed", "1.5", "whole number"]),
    "seed boolean": (("seed", "seed = true"), ["search.seed", "found true", "whole number"]),
    "seed negative": (("seed", "seed = -1"), ["search.seed", "at least 0"]),
    "population": (("population", "population = 2"), ["search.population", "at least 8"]),
    "search key": (("generations", "generation = 2"), ["search.generation: unknown key", '"generations"?']),
    "title number": (("title", "title = 3"), ["title", "found 3", "a text"]),
    "title long": (("title", f'title = "{"x" * 300}"'), ["title", "at most 200"]),
    "title key": (("title", 'tilte = "a"'), ["tilte: unknown key", '"title"?']),
    "key with bracket": (("title", '"a[b" = 1'), ["a[b: unknown key"]),
    "key with newline": (("title", '"a\\nb" = 1'), ['"a?b"']),
    "key long": (("title", f'{"k" * 3000} = 1'), ["kkk", "too long"]),
    "process": (("process", 'process = "generic-18"'), ["process", '"generic-18"', "handbook", '"generic-180"?']),
    "process path": (("process", 'process = "./foundry.toml"'), ["process", "foundry.toml", "nor a file"]),
    "process near path": (("process", 'process = "stag.toml"'), ["process", 'mean "stage.toml"?']),
    "process directory": (("process", 'process = "."'), ["process", "nor a file"]),
    "process long": (("process", f'process = "{"x" * 5000}"'), ["process", "nor a file"]),
    "process number": (("process", "process = 180"), ["process", "found 180"]),
    "deep keys": (("title", f"title{'.a' * 3000} = 1"), ["nested"]),
    "deep lists": (("title", f"title = {'[' * 20000}{']' * 20000}"), ["nested"]),
    "key twice": (("title", 'title = "a"\ntitle = "b"'), ["not valid TOML"]),
}  # fmt: skip


def refused(cli: Cli, *expected: str, words: tuple[str, ...] = ("search", "stage.toml", "--to", "run")) -> Result:
    """Call a command and hold its answer against what every refusal has to be."""
    before = sorted(Path.cwd().rglob("*"))
    result = cli(*words)
    assert result.exit_code == 2, (result.exit_code, result.stdout, result.stderr)
    assert result.stdout == ""
    assert result.stderr.startswith("optisize: ")
    assert result.stderr.count("\n") == 1
    assert result.stderr[:-1].isprintable()
    assert len(result.stderr) < 600
    assert "internal error" not in result.stderr
    assert "Traceback" not in result.stderr
    for part in expected:
        assert part in result.stderr
    assert sorted(Path.cwd().rglob("*")) == before
    return result


@pytest.mark.parametrize("case", CASES)
def test_a_mistake_in_a_problem_file_is_one_clear_message(cli: Cli, case: str) -> None:
    *edits, expected = CASES[case]
    Path("stage.toml").write_text(changed(RESISTOR, *edits), encoding="utf-8")  # type: ignore[arg-type]
    refused(cli, "stage.toml: ", *expected)  # type: ignore[arg-type]


def test_a_stage_that_cannot_be_is_refused(cli: Cli) -> None:
    Path("stage.toml").write_text(changed(MIRROR, ("output", 'output = "differential"')), encoding="utf-8")
    refused(cli, "stage.output", '"differential"', '"mirror"', "single-ended")
    text = changed(MIRROR, ("load.length", 'load.resistance = "1 kohm"'))
    Path("stage.toml").write_text(text, encoding="utf-8")
    refused(cli, "sizes.load.resistance", "load mirror", "load.width, load.length")


def test_a_goal_that_is_the_same_for_every_design_is_refused(cli: Cli) -> None:
    Path("stage.toml").write_text(IDEAL, encoding="utf-8")
    refused(cli, "stage.toml: goals.cmrr", "same for every design", "unlimited")
    text = changed(RESISTOR, ("cmrr", 'tail.id = "min"'), ("bias.current", 'bias.current = "1 uA"'))
    text = changed(text, ("tail.units", "tail.units = 1"), ("gain", 'bias.id = "min"'))
    Path("stage.toml").write_text(text, encoding="utf-8")
    refused(cli, "stage.toml: goals.bias.id", "same for every design", "1e-06 A")


def test_a_problem_without_a_free_size_is_refused(cli: Cli) -> None:
    sizes = RESISTOR[RESISTOR.index("input.width") : RESISTOR.index("\n[goals]")]
    text = RESISTOR.replace(sizes, SIZING[SIZING.index("input.width") :])
    Path("stage.toml").write_text(text, encoding="utf-8")
    refused(cli, "sizes", "every size is fixed", "assess")


FILES = {
    "empty": (b"", "is empty"),
    "blank": (b" \n\n", "is empty"),
    "comment": (b"# nothing\n", "title: is missing"),
    "binary": (random.Random(1).randbytes(3000), "UTF-8"),
    "zeros": (b'title = "a"\0', "NUL"),
    "latin-1": ("title = 'é'".encode("latin-1"), "UTF-8"),
    "utf-16": (RESISTOR.encode("utf-16"), "UTF-8"),
    "huge": (RESISTOR.encode() + b"#" + b"x" * 10_000_000, "larger than 1000 kB"),
    "yaml": (b"title: a stage\nprocess: x\n", "not valid TOML"),
    "json": (b'{"title": "x"}', "not valid TOML"),
    "old line ends": (RESISTOR.replace("\n", "\r").encode(), "not valid TOML"),
}


@pytest.mark.parametrize("case", FILES)
def test_a_file_that_is_no_problem_file_is_refused(cli: Cli, case: str) -> None:
    data, expected = FILES[case]
    Path("stage.toml").write_bytes(data)
    refused(cli, "stage.toml: ", expected)


def test_a_path_that_is_no_file_is_refused(cli: Cli) -> None:
    Path("stage.toml").write_text(RESISTOR, encoding="utf-8")
    refused(cli, "stge.toml", "no such file", '"stage.toml"?', words=("search", "stge.toml"))
    refused(cli, "is a directory", words=("search", "."))
    refused(cli, "cannot be read", words=("search", "x" * 300))
    refused(cli, "no such file", words=("search", "stage.toml/stage.toml"))
    refused(cli, "a b.toml", words=("search", "a\nb.toml"))


@pytest.mark.parametrize("mark", ["\ufeff", "\r\n"])
def test_files_from_other_editors_are_read(cli: Cli, mark: str) -> None:
    text = mark + RESISTOR if mark == "\ufeff" else RESISTOR.replace("\n", mark)
    Path("stage.toml").write_bytes(text.encode())
    words = ("--generations", "21", "--no-figures", "--quiet")
    result = cli("search", "stage.toml", "--to", "run", *words)
    assert result.exit_code == 0, result.stderr
    assert Path("run/problem.toml").read_bytes() == text.encode()
    assert cli("front", "run").exit_code == 0


PROCESSES = {
    "law": (("law", 'law = "sqare"'), ["law", '"sqare"', "square, charge", '"square"?']),
    "law missing": (("law", ""), ["law", "is missing", "square, charge"]),
    "law list": (("law", 'law = ["charge"]'), ["law", '["charge"]']),
    "parameter missing": (("threshold", ""), ["nmos.threshold", "is missing"]),
    "parameter name": (("threshold", 'thresold = "0.4 V"'), ["nmos.thresold: unknown key", '"threshold"?']),
    "parameter unit": (("threshold", 'threshold = "0.5 A"'), ["nmos.threshold", '"0.5 A"', '"V"']),
    "parameter sign": (("current_factor", 'current_factor = "-1 uA/V^2"'), ["nmos.current_factor", "above 0"]),
    "table name": (("[nmos]", "[nmoss]"), ["nmoss: unknown key", '"nmos"?']),
    "corner table": (("[corners.slow]\nnmos ", "[corners.slow]\nnmso "), ["corners.slow.nmso", "pmos", '"nmos"?']),
    "corner key": (("{ threshold =", "{ treshold ="), ["corners.slow.nmos.treshold", "factor", '"threshold"?']),
    "corner number": (("[corners.slow]", "[corners]\nodd = 3\n[corners.slow]"), ["corners.odd", "a table is needed"]),
    "grid": (("step", 'step = "-1 nm"'), ["grid.step", "above 0 m"]),
    "lengths": (("minimum_length", 'minimum_length = "1 mm"'), ["grid.minimum_length", "grid.maximum_length"]),
}  # fmt: skip


@pytest.mark.parametrize("case", PROCESSES)
def test_a_mistake_in_a_process_file_is_one_clear_message(cli: Cli, case: str) -> None:
    *edits, expected = PROCESSES[case]
    Path("foundry.toml").write_text(changed(PROCESS, *edits), encoding="utf-8")  # type: ignore[arg-type]
    Path("stage.toml").write_text(changed(RESISTOR, ("process", 'process = "foundry.toml"')), encoding="utf-8")
    refused(cli, "foundry.toml: ", *expected)  # type: ignore[arg-type]
    refused(cli, "foundry.toml: ", *expected, words=("process", "show", "foundry.toml"))  # type: ignore[arg-type]


def test_an_unknown_process_is_refused(cli: Cli) -> None:
    refused(cli, '"generic180"', "handbook", '"generic-180"?', words=("process", "show", "generic180"))
    refused(cli, "nor a file", words=("process", "show", "x" * 5000))
    refused(cli, "nor a file", words=("process", "show", "."))


SIZINGS = {
    "range": (("input.width", 'input.width = ["2 um", "3 um"]'), ["sizes.input.width", "one value"]),
    "missing": (("tail.units", ""), ["sizes.tail.units", "is missing"]),
    "name": (("tail.units", "tail.unit = 2"), ["sizes.tail.unit", '"tail.units"?']),
    "unit": (("input.width", 'input.width = "20 V"'), ["sizes.input.width", '"20 V"', '"m"']),
    "no table": (("[sizes]", ""), ["input: unknown key", "title, sizes"]),
    "goals": (("[sizes]", '[goals]\ngain = "max"\n[sizes]'), ["goals: unknown key"]),
    "too narrow": (("input.width", 'input.width = "0.1 um"'), ["sizes.input.width", "440 nm"]),
}


@pytest.mark.parametrize("case", SIZINGS)
def test_a_mistake_in_a_sizing_file_is_one_clear_message(cli: Cli, case: str) -> None:
    edit, expected = SIZINGS[case]
    Path("stage.toml").write_text(RESISTOR, encoding="utf-8")
    Path("hand.toml").write_text(changed(SIZING, edit), encoding="utf-8")  # type: ignore[arg-type]
    refused(cli, "hand.toml: ", *expected, words=("assess", "stage.toml", "hand.toml"))
    refused(cli, "hand.toml: ", *expected, words=("search", "stage.toml", "--from", "hand.toml"))
