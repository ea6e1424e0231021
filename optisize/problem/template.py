"""The commented problem file that `optisize new` writes to start from."""

from __future__ import annotations

from optisize.stage.assembly import build
from optisize.stage.elements import Size
from optisize.stage.topology import FORMS, STAGE_WORDS

TEMPLATE = """\
# A problem for optisize. Quantities are texts with their unit ("250 nA", "1.2 um"); a bare number is in SI units.
# `optisize schema` prints the whole grammar, `optisize measures` what can be a goal or a limit.
title   = "{title}"
process = "generic-180"            # a built-in process (`optisize process list`), or the path of a process file

[stage]
{stage}
# bulk = "source"                  # ties the pair's bulk to its source, in a well of its own; otherwise to the rail

[conditions]
supply             = "1.8 V"
common_mode        = {common_mode}  # a value, or a range that every design must live with
{held}load_capacitance   = "1 pF"              # from each output to ground
temperature        = "27 degC"
# corner           = "slow"              # a corner of the process; typical where absent

[sizes]                            # one value fixes a size, two values free it between them
{sizes}
# input.degeneration = ["100 ohm", "10 kohm"]   # puts a resistor under each input transistor

# [measures]                       # where measures with parameters are taken; each has a default
# input_noise = {{ frequency = "10 Hz" }}                        # of the catalogue
# wideband    = {{ of = "input_noise", frequency = "100 kHz" }}  # the same again, under a name of your own

[goals]                            # one to many; each "max" or "min"
gain           = "max"
cmrr_mismatch  = "max"              # cmrr is that of perfectly matched devices
supply_current = "min"

[limits]                           # {{ min = "..." }}, {{ max = "..." }} or both; without one on headroom, it is >= 0
headroom  = {{ min = "{headroom}" }}
area      = {{ max = "4000 um^2" }}
bandwidth = {{ min = "{bandwidth}" }}

[search]
population  = 200
generations = 200
seed        = 1                    # the same seed gives the same front
patience    = 60                   # generations without gain after which the search stops; 0: never
"""


HELD = 'output_common_mode = "0.9 V"             # where the load holds the outputs\n'
RANGES = {
    "width": '["1 um", "200 um"]',
    "length": '["0.18 um", "4 um"]',
    "resistance": '["5 kohm", "2 Mohm"]',
    "count": "[1, 16]",
    "current": '["100 nA", "20 uA"]',
}
SPECIAL = {
    "load.length": '["0.18 um", "8 um"]',
    "load.units": "[1, 8]",
    "tail.length": '["0.18 um", "8 um"]',
    "tail.width": '["1 um", "40 um"]',
    "tail.units": "[2, 16]",
    "tail.current": '["1 uA", "100 uA"]',
    "cascode.length": '["0.18 um", "1 um"]',
    "cascode.bias.width": '["0.3 um", "20 um"]',
    "cascode.bias.length": '["0.18 um", "8 um"]',
}


def new_problem(title: str, **stage: str) -> str:
    """Return the text of a new problem file.

    Args:
        title: of the problem.
        stage: ``input``, ``load``, ``tail``, ``output`` and ``form`` as in a problem file, where not the usual ones.

    Raises InputError for a combination that makes no sense.
    """
    chosen = {"input": "nmos", "load": "mirror", "tail": "single", "form": "simple"} | stage
    loads = FORMS[chosen["form"]].loads
    if "output" not in chosen:
        outputs = loads[chosen["load"]].outputs if chosen["load"] in loads else ("single-ended",)
        chosen["output"] = outputs[0]
    topology = build(**chosen)
    quoted = {key: f'"{chosen[key]}"' for key in STAGE_WORDS if key in chosen}
    stage_lines = [f"{key:6} = {value:26}# {' | '.join(STAGE_WORDS[key])}" for key, value in quoted.items()]
    width = max(len(size.name) for size in topology.sizes)
    lines = [f"{size.name:{width}} = {_range(size):22} # {size.meaning}" for size in topology.sizes]
    safe = "".join(c for c in title if c.isprintable()).replace("\\", " ").replace('"', "'")
    return TEMPLATE.format(
        title=safe[:200],
        stage="\n".join(stage_lines),
        common_mode='["0.9 V", "1.1 V"]' if chosen["input"] == "nmos" else '["0.6 V", "0.8 V"]',
        held=HELD if topology.controls else "",
        sizes="\n".join(lines),
        headroom="50 mV" if chosen["form"] == "simple" else "20 mV",
        bandwidth="20 kHz" if chosen["form"] == "simple" else "100 Hz",
    )


def _range(size: Size) -> str:
    """Return the range that a size begins with."""
    special = [key for key in SPECIAL if size.name == key or size.name.endswith(f".{key}")]
    return SPECIAL[special[-1]] if special else RANGES[size.kind]
