"""The commented problem file that `optisize new` writes to start from."""

TEMPLATE = """\
# A problem for optisize. Quantities are texts with their unit ("250 nA", "1.2 um"); a bare number is in SI units.
# `optisize schema` prints the whole grammar, `optisize measures` what can be a goal or a limit.
title   = "{title}"
process = "generic-180"            # a built-in process (`optisize process list`), or the path of a process file

[stage]
input  = "nmos"                    # nmos | pmos
load   = "mirror"                  # resistor | mirror
tail   = "single"                  # ideal | single
output = "single-ended"            # single-ended | differential (resistor load)
# bulk = "source"                  # ties the pair's bulk to its source, in a well of its own; otherwise to the rail

[conditions]
supply           = "1.8 V"
common_mode      = ["0.9 V", "1.1 V"]   # a value, or a range that every design must live with
load_capacitance = "1 pF"               # from each output to ground
temperature      = "27 degC"
# corner         = "slow"               # a corner of the process; typical where absent

[sizes]                            # one value fixes a size, two values free it between them
input.width  = ["2 um", "200 um"]
input.length = ["0.18 um", "4 um"]
load.width   = ["1 um", "100 um"]       # of each mirror transistor; a resistor load has load.resistance instead
load.length  = ["0.18 um", "8 um"]
tail.width   = ["1 um", "40 um"]        # of one unit; bias and tail are made of equal units
tail.length  = ["0.18 um", "8 um"]
tail.units   = [1, 16]                  # units in the tail; the bias branch has one
bias.current = ["100 nA", "20 uA"]      # an ideal tail has tail.current instead of tail.* and bias.current

# [measures]                       # where measures with parameters are taken; each has a default
# input_noise = {{ frequency = "10 Hz" }}                        # of the catalogue
# wideband    = {{ of = "input_noise", frequency = "100 kHz" }}  # the same again, under a name of your own

[goals]                            # one to many; each "max" or "min"
gain           = "max"
cmrr           = "max"
supply_current = "min"

[limits]                           # {{ min = "..." }}, {{ max = "..." }} or both; without one on headroom, it is >= 0
headroom  = {{ min = "50 mV" }}
area      = {{ max = "4000 um^2" }}
bandwidth = {{ min = "20 kHz" }}

[search]
population  = 200
generations = 200
seed        = 1                    # the same seed gives the same front
patience    = 60                   # generations without gain after which the search stops; 0: never
"""


def new_problem(title: str) -> str:
    """Return the text of a new problem file with a title."""
    safe = "".join(c for c in title if c.isprintable()).replace("\\", " ").replace('"', "'")
    return TEMPLATE.format(title=safe[:200])
