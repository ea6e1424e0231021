"""What a bench knows of its stage, and the commands of the simulator that benches share.

What was found by trying (version 39): one point at 1 uHz is as good as DC, 1 mHz is not for a
rejection of 200 dB. ``$&x``
writes six digits. The last point of a sweep is lost to rounding unless its end lies a little beyond. A figure that is
looked for by ``meas`` has to exist, or there is a message.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import NamedTuple

import numpy as np

from optisize.simulator.devices import Devices
from optisize.simulator.netlist import HELD, STAGE, Device, Netlist, number
from optisize.stage.analysis import Analysis
from optisize.stage.wiring import PAIR_GROUP

DC = "ac lin 1 1u 1u"
EXACT = "reltol=1e-7 abstol=1e-16 vntol=1e-10 gmin=1e-16"
# For ends that are read to a millivolt; a leak at each junction keeps the matrix regular where everything is off.
ROUGH = "reltol=1e-5 abstol=1e-13 vntol=1e-7 gmin=1e-12"
POINTS = 50  # of a sweep to where an end is expected
REACHES = (1.02, 1.2, 3.0, 20.0)  # of the way to where an end is expected, as far as a sweep goes


class Answer(NamedTuple):
    """The commands of a bench, and how the figure is called afterwards."""

    lines: list[str]
    figure: str = "$&result"


@dataclass(frozen=True)
class Site:
    """What a bench knows of the stage that it is for.

    Attributes:
        a: one design.
        netlist, devices: how it is written.
    """

    a: Analysis
    netlist: Netlist
    devices: Devices

    @property
    def ends(self) -> tuple[str, ...]:
        """The nodes of the output, the positive one first."""
        return tuple(self.netlist.outputs.values())

    @property
    def output(self) -> str:
        """The output."""
        return "-".join(f"v({x})" for x in self.ends)

    @property
    def mean(self) -> str:
        """The output, or the mean of its sides."""
        return self.output if len(self.ends) == 1 else f"({'+'.join(f'v({x})' for x in self.ends)})/2"

    @property
    def noise_output(self) -> str:
        """The output as the noise analysis wants it."""
        return f"v({','.join(self.ends)})"

    @cached_property
    def transistors(self) -> list[Device]:
        """The transistors."""
        return self.netlist.devices()

    def across(self, device: Device) -> str:
        """Return the drain-source voltage of a transistor, positive for either channel."""
        t = self.a.topology.transistors[device.row]
        drain, source = self.netlist.outside(t.drain), self.netlist.outside(t.source)
        return f"v({drain})-v({source})" if device.channel == "n" else f"v({source})-v({drain})"

    def control(self, device: Device) -> str:
        """Return the gate-source voltage of a transistor, positive for either channel."""
        t = self.a.topology.transistors[device.row]
        gate, source = self.netlist.outside(t.gate), self.netlist.outside(t.source)
        return f"v({gate})-v({source})" if device.channel == "n" else f"v({source})-v({gate})"

    def room(self) -> dict[str, str]:
        """Return vds - vdsat of everything that has to be saturated, by names for vectors."""
        rows = [t.saturates for t in self.a.topology.transistors]
        devices = [d for d, saturates in zip(self.transistors, rows, strict=True) if saturates]
        return {f"room_{d.name}": f"{self.across(d)}-{self.devices.figure(d, 'vdsat')}" for d in devices}

    def pair(self, stage: str = STAGE) -> list[str]:
        """Return the commands that make ``positive`` and ``negative``, the currents of the pair."""
        named = {d.name: d for d in self.transistors}
        return [
            f"let {side} = {self.devices.figure(named[name], 'id', stage)}"
            for side, name in (("positive", "input_p"), ("negative", "input_n"))
        ]

    def held(self) -> dict[str, str]:
        """Return what is held at rest where the pair is looked at alone: its name in the held instance by that of the
        node in the other one.

        The drains of the pair are; the outputs and what controls them are too, since they would go to the rails, and
        nothing of them comes back through drains that are held.
        """
        drains = [t.drain for t in self.a.topology.transistors if t.group == PAIR_GROUP]
        nodes = dict.fromkeys([*drains, "left", "right", *self.netlist.controlled])
        names = [self.netlist.outside(node) for node in nodes]
        return {n: f"{HELD}_{n}" if n in self.netlist.ports else n.replace(f"x{STAGE}.", f"x{HELD}.") for n in names}


def at(frequency: float) -> str:
    """Return the analysis at a frequency, or at DC where it is zero."""
    return f"ac lin 1 {number(frequency)} {number(frequency)}" if frequency else DC


def driven(source: str, analysis: str, lines: Sequence[str]) -> list[str]:
    """Return an analysis with another source than the differential one, and what is read from it."""
    before = ["alter @vd[acmag]=0", f"alter @{source}[acmag]=1"]
    return [*before, analysis, *lines, f"alter @{source}[acmag]=0", "alter @vd[acmag]=1"]


def swept(
    source: str, begin: float, ways: Sequence[float], margins: Mapping[str, str], read: str, first: Sequence[str] = ()
) -> list[str]:
    """Return the commands that sweep a source from a value to where the first margin vanishes, and what is read there.

    The sweep goes as far as the first of the ways along which a margin vanishes. The variable ``reading`` holds what is
    read there, 0 where a margin is gone at the beginning, and 1e99 where none vanishes.

    Args:
        source: the source.
        begin: its value at rest.
        ways: how far it goes from there, with the sign, the shortest first.
        margins: expressions by names for vectors. Each is straight enough between the points, their least is not.
        read: an expression that grows along the way.
        first: commands before the margins are taken.
    """
    start = number(begin)
    return [
        "set reading = 1e99",
        f"foreach way {' '.join(number(w) for w in ways)}",
        "  if $reading gt 1e98",
        f"    let stop = {start}+($way)*1.001",
        f"    let step = ($way)/{POINTS}",
        f"    dc {source} {start} $&stop $&step",
        *(f"    {line}" for line in first),
        *(f"    let {name} = {margin}" for name, margin in margins.items()),
        f"    let along = {read}",
        f"    foreach margin {' '.join(margins)}",
        "      let left = $margin",
        "      if left[0] le 0",
        "        set reading = 0",
        "      end",
        "      if left[0] gt 0 and vecmin(left) lt 0",
        "        meas dc end find along when left=0 fall=1",
        "        if end lt $reading",
        "          set reading = $&end",
        "        end",
        "      end",
        "    end",
        "  end",
        "end",
    ]


def ways(expected: float, sign: float, most: float = np.inf) -> list[float]:
    """Return the ways of a sweep: a little beyond the end that is expected, then further."""
    far = abs(expected) if np.isfinite(expected) and expected else min(most, 0.1)
    lengths = [w for w in (far * reach for reach in REACHES) if w < most]
    return [sign * w for w in (*lengths, *([most] if np.isfinite(most) else []))]


def nearer(sweep: Callable[[float], list[str]], before: Sequence[str] = ()) -> Answer:
    """Return the smaller reading of a sweep in both directions.

    Args:
        sweep: the commands of a direction.
        before: what is done before the sweeps.
    """
    lines = [*before, *sweep(1.0), "set forward = $reading", *sweep(-1.0)]
    return found([*lines, "if $forward lt $reading", "  set reading = $forward", "end"])


def found(lines: Sequence[str]) -> Answer:
    """Return the reading of a sweep, in words where there is none."""
    return Answer([*lines, "if $reading gt 1e98", "  set reading = undefined", "end"], "$reading")
