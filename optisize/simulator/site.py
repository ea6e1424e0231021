"""What a bench knows of its stage, and the commands of the simulator that benches share.

What was found by trying (version 39): one point at 1 mHz is as good as DC, 1 Hz is not for stages on gigaohms. ``$&x``
writes six digits. The last point of a sweep is lost to rounding unless its end lies a little beyond. A figure that is
looked for by ``meas`` has to exist, or there is a message.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import NamedTuple

import numpy as np

from optisize.simulator.devices import Devices
from optisize.simulator.netlist import Device, Netlist, number
from optisize.stage.analysis import Analysis

DC = "ac lin 1 1m 1m"
POINTS = 30  # of a sweep to where an end is expected
REACH = 1.5  # of that way, as far as a sweep goes; eight times that and eight times that again where there is no end
FINE = 10  # points to each point of the coarse sweep, about the end


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
        return f"({'+'.join(f'v({x})' for x in self.ends)})/{len(self.ends)}"

    @property
    def noise_output(self) -> str:
        """The output as the noise analysis wants it."""
        return f"v({','.join(self.ends)})"

    @property
    def alike(self) -> bool:
        """Whether one direction of the input tells what the other does."""
        return self.a.alike

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

    def room(self) -> list[str]:
        """Return the commands that make ``room``, the least vds - vdsat of what has to be saturated."""
        terms = []
        for d, t in zip(self.transistors, self.a.topology.transistors, strict=True):
            if t.saturates:
                terms.append(f"{self.across(d)}-{self.devices.figure(d, 'vdsat')}")
        first, *rest = terms
        return [f"let room = {first}", *(f"let room = least(room, {term})" for term in rest)]

    def pair(self) -> list[str]:
        """Return the commands that make ``positive`` and ``negative``, the currents of the pair."""
        named = {d.name: d for d in self.transistors}
        return [
            f"let positive = {self.devices.figure(named['input_p'], 'id')}",
            f"let negative = {self.devices.figure(named['input_n'], 'id')}",
        ]

    def held(self) -> list[str]:
        """Return the nodes that are held where the output is said to be at rest, those of the output first."""
        sides = [self.netlist.outside(x) for x in ("right", "left")] if self.a.topology.symmetric else []
        return [*dict.fromkeys([*self.ends, *sides]), *(self.netlist.control_node(c) for c in self.netlist.controlled)]


def at(frequency: float) -> str:
    """Return the analysis at a frequency, or at DC where it is zero."""
    return f"ac lin 1 {number(frequency)} {number(frequency)}" if frequency else DC


def driven(source: str, analysis: str, lines: Sequence[str]) -> list[str]:
    """Return an analysis with another source than the differential one, and what is read from it."""
    before = ["alter @vd[acmag]=0", f"alter @{source}[acmag]=1"]
    return [*before, analysis, *lines, f"alter @{source}[acmag]=0", "alter @vd[acmag]=1"]


def swept(source: str, begin: float, ways: Sequence[float], room: Sequence[str], read: str) -> list[str]:
    """Return the commands that sweep a source from a value to where ``room`` vanishes, and read something there.

    The sweep goes in steps as far as the first of the ways that reaches an end, then in finer ones about that end. The
    variable ``reading`` holds what is read, 0 where there is no room at the beginning, and 1e99 where no way ends.

    Args:
        source: the source.
        begin: its value at rest.
        ways: how far it goes from there, with the sign, the shortest first.
        room: the commands that make it.
        read: an expression.
    """
    start = number(begin)
    return [
        "set reading = 1e99",
        "set open = 1",
        f"foreach way {' '.join(number(w) for w in ways)}",
        "  if $open",
        f"    let stop = {start}+($way)*1.001",
        f"    let step = ($way)/{POINTS}",
        "    set step = $&step",
        f"    dc {source} {start} $&stop $step",
        *(f"    {line}" for line in room),
        "    if room[0] le 0",
        "      set open = 0",
        "      set reading = 0",
        "    end",
        "    if $open and vecmin(room) lt 0",
        "      set open = 0",
        "      meas dc near when room=0 fall=1",
        "      let from = near-($step)",
        "      let stop = near+($step)*1.001",
        f"      let step = ($step)/{FINE}",
        f"      dc {source} $&from $&stop $&step",
        *(f"      {line}" for line in room),
        f"      let read = {read}",
        "      meas dc end find read when room=0 fall=1",
        "      set reading = $&end",
        "    end",
        "  end",
        "end",
    ]


def ways(expected: float, sign: float, most: float = np.inf) -> list[float]:
    """Return the ways of a sweep to where an end is expected: a little beyond, eight times and 64 times as far."""
    far = abs(expected) if np.isfinite(expected) and expected else min(most, 0.1)
    lengths = [w for w in (REACH * far * 8.0**k for k in range(3)) if w < most]
    return [sign * w for w in (*lengths, *([most] if np.isfinite(most) else []))]


def nearer(
    s: Site,
    sweep: Callable[[float], list[str]],
    *,
    before: Sequence[str] = (),
    after: Sequence[str] = (),
    both: bool = False,
) -> Answer:
    """Return the smaller reading of both directions of a sweep, or of one where they are alike.

    Args:
        s: the stage.
        sweep: the commands of a direction.
        before, after: what is done before the sweeps and after them.
        both: whether the directions differ in any case.
    """
    lines = [*before, *sweep(1.0)]
    if both or not s.alike:
        lines += ["set forward = $reading", *sweep(-1.0), "if $forward lt $reading", "  set reading = $forward", "end"]
    return Answer([*lines, *after, "if $reading gt 1e98", "  set reading = undefined", "end"], "$reading")
