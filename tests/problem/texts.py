"""Problem and sizing files as text, with a way to change a line: what a designer's editor would do."""

from __future__ import annotations

from importlib import resources
from pathlib import Path

from optisize.problem.evaluate import Problem
from optisize.problem.load import load_problem

RESISTOR = """\
title   = "a stage with resistors"
process = "generic-180"

[stage]
input  = "nmos"
load   = "resistor"
tail   = "single"
output = "single-ended"

[conditions]
supply           = "1.8 V"
common_mode      = ["0.9 V", "1.1 V"]
load_capacitance = "500 fF"
temperature      = "27 degC"

[sizes]
input.width     = ["2 um", "400 um"]
input.length    = ["0.18 um", "4 um"]
load.resistance = ["5 kohm", "2 Mohm"]
tail.width      = ["1 um", "40 um"]
tail.length     = ["0.18 um", "8 um"]
tail.units      = [1, 16]
bias.current    = ["100 nA", "20 uA"]

[goals]
gain           = "max"
cmrr           = "max"
supply_current = "min"

[limits]
power        = { max = "60 uW" }
output_swing = { min = "0.6 V" }
headroom     = { min = "50 mV" }
area         = { max = "6000 um^2" }
bandwidth    = { min = "1 MHz" }

[search]
population  = 40
generations = 41
seed        = 1
"""

_RESISTOR_SIZES = RESISTOR[RESISTOR.index("input.width") : RESISTOR.index("\n[goals]")]

MIRROR = (
    RESISTOR.replace('load   = "resistor"', 'load   = "mirror"')
    .replace("load.resistance", "load.length")
    .replace('["5 kohm", "2 Mohm"]', '["0.18 um", "8 um"]\nload.width = ["1 um", "100 um"]')
    .replace('{ min = "0.6 V" }', '{ min = "0.3 V" }')
    .replace('{ min = "1 MHz" }', '{ min = "20 kHz" }')
)  # fmt: skip

IDEAL = RESISTOR.replace('tail   = "single"', 'tail   = "ideal"').replace(
    _RESISTOR_SIZES[_RESISTOR_SIZES.index("tail.width") :], 'tail.current = ["200 nA", "40 uA"]\n'
)

SIZING = """\
title = "by hand"

[sizes]
input.width     = "20 um"
input.length    = "0.5 um"
load.resistance = "100 kohm"
tail.width      = "5 um"
tail.length     = "1 um"
tail.units      = 2
bias.current    = "2 uA"
"""

PROCESS = resources.files("optisize.process").joinpath("data", "generic-180.toml").read_text(encoding="utf-8")


def changed(text: str, *edits: tuple[str, str]) -> str:
    """Return the text with each edit made: the line that begins with a key, or the first place that has the words."""
    for words, other in edits:
        lines = text.splitlines(keepends=True)
        keys = [i for i, line in enumerate(lines) if line.partition("=")[0].strip() == words]
        if keys:
            lines[keys[0]] = f"{other}\n"
            text = "".join(lines)
        else:
            assert words in text, words
            text = text.replace(words, other, 1)
    return text


def loaded(directory: Path, text: str, name: str = "stage.toml") -> Problem:
    """Write a problem file and load it."""
    path = directory / name
    path.write_text(text, encoding="utf-8")
    return load_problem(path)
