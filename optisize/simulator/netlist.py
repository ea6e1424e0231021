"""A sized stage as lines of a SPICE deck: names and numbers that a person reads, and nothing that a text could add."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from decimal import Decimal

from optisize.process.law import Array
from optisize.stage.circuit import Circuit
from optisize.stage.elements import REFERENCE, Channel

STAGE, HELD = "stage", "held"  # the subcircuit and its instance in the bench; the instance whose outputs are held
DIGITS = 12
LOOP = 1e-6  # A/V, of ideal loops; a thousand times more and they often do not converge
HALF = 0.5
_PREFIXES = {12: "t", 9: "g", 6: "meg", 3: "k", 0: "", -3: "m", -6: "u", -9: "n", -12: "p", -15: "f"}
_RAILS = {"supply": "vdd", "ground": "vss", "in+": "inp", "in-": "inn"}
_UNSAFE = re.compile(r"[^A-Za-z0-9 _.,:()+/%='-]")
_PLAIN = {"√Hz": "sqrt(Hz)", "µ": "u", "μ": "u", "Ω": "ohm", "`": "'", ";": ","}
_LINE = 118  # letters


def number(value: float) -> str:
    """Return a number as SPICE reads it, with every digit that the grid has: ``70.48u``, ``297.3k``, ``1.2meg``."""
    digits = Decimal(f"{value:.{DIGITS}g}")
    if not digits:
        return "0"
    exponent = 3 * (digits.adjusted() // 3)
    if exponent not in _PREFIXES:
        return f"{value:.{DIGITS}g}"
    if exponent == -3 and abs(digits) >= Decimal("0.1"):
        exponent = 0
    return f"{digits.scaleb(-exponent).normalize():f}{_PREFIXES[exponent]}"


def clean(text: str) -> str:
    """Return a text as a comment may hold it: one line of plain letters, with nothing that a simulator acts upon."""
    for letter, plain in _PLAIN.items():
        text = text.replace(letter, plain)
    return _UNSAFE.sub("?", " ".join(text.split()))


def comment(text: str) -> list[str]:
    """Return a text as lines of comment."""
    words, lines = clean(text).split(" "), ["*"]
    for word in words:
        if len(lines[-1]) + len(word) >= _LINE and lines[-1] != "*":
            lines.append("*  ")
        lines[-1] += f" {word}"
    return lines


def part(name: str) -> str:
    """Return the name of an element: ``input_p`` of ``input.p``."""
    return name.replace(".", "_")


@dataclass(frozen=True)
class Device:
    """One transistor of a stage as a deck has it; SI units.

    Attributes:
        name, drain, gate, source, bulk: as in the subcircuit.
        channel, group: of which kind it is, and with which others it is drawn alike.
        row: of the transistor in the arrays of the circuit.
        width, length: of one unit.
        units, fingers: how many units of how many fingers.
        drain_area, source_area, drain_edge, source_edge: junctions of one unit, without the edges under the gate.
    """

    name: str
    drain: str
    gate: str
    source: str
    bulk: str
    channel: Channel
    group: str
    row: int
    width: float
    length: float
    units: int
    fingers: int
    drain_area: float
    source_area: float
    drain_edge: float
    source_edge: float

    @property
    def ends(self) -> str:
        """Drain, gate, source and bulk as a line has them."""
        return f"{self.drain} {self.gate} {self.source} {self.bulk}"


@dataclass(frozen=True)
class Netlist:
    """The elements and nodes of one sized stage.

    Attributes:
        circuit: one design.
    """

    circuit: Circuit

    @property
    def outputs(self) -> dict[str, str]:
        """The ports of the outputs by the nodes of the stage, the positive one first."""
        nodes = [node for node, _ in self.circuit.topology.output]
        return dict(zip(nodes, ("outp", "outn") if len(nodes) > 1 else ("out",), strict=True))

    @property
    def ports(self) -> list[str]:
        """The ports of the subcircuit: inputs, outputs, what a common-mode control sets, and the rails."""
        return ["inp", "inn", *self.outputs.values(), *self.controlled, "vdd", "vss"]

    @property
    def controlled(self) -> list[str]:
        """The nodes that common-mode controls set."""
        return [c.node for c in self.circuit.topology.controls]

    def inside(self, node: str) -> str:
        """Return the name of a node of the stage in its subcircuit."""
        return self.outputs.get(node, _RAILS.get(node, node))

    def outside(self, node: str) -> str:
        """Return the name of a node of the stage in the bench."""
        name = self.inside(node)
        return name if name in self.ports or node == REFERENCE else f"x{STAGE}.{name}"

    def devices(self) -> list[Device]:
        """Return the transistors."""
        c, drawn = self.circuit, self.circuit.drawn

        def of(values: Array, row: int) -> float:
            return float(values[row, 0] / c.units[row, 0])

        return [
            Device(
                name=part(t.name),
                drain=self.inside(t.drain),
                gate=self.inside(t.gate),
                source=self.inside(t.source),
                bulk=self.inside(c.topology.bulk_node(t)),
                channel=c.topology.channel(t),
                group=part(t.group),
                row=row,
                width=float(c.width[row, 0]),
                length=float(c.length[row, 0]),
                units=int(c.units[row, 0]),
                fingers=int(drawn.fingers[row, 0]),
                drain_area=of(drawn.drain_area, row),
                source_area=of(drawn.source_area, row),
                drain_edge=of(drawn.drain_edge, row),
                source_edge=of(drawn.source_edge, row),
            )
            for row, t in enumerate(c.topology.transistors)
        ]

    def passives(self) -> list[str]:
        """Return resistors with what they have to the substrate, and the current sources of the bias."""
        c = self.circuit
        lines = []
        for row, r in enumerate(c.topology.resistors):
            value = 1.0 / float(c.network.conductances[row, 0])
            ends = self.inside(r.a), self.inside(r.b)
            lines.append(f"R{part(r.name)} {ends[0]} {ends[1]} {number(value)}")
            half = HALF * float(c.resistor_capacitances[row, 0])
            lines += [
                f"C{part(r.name)}_{end} {end} vss {number(half)}" for end in ends if half and end not in ("vdd", "vss")
            ]
        for row, s in enumerate(c.topology.sources):
            value = float(c.network.currents[row, 0])
            a, b = (s.a, s.b) if value >= 0.0 else (s.b, s.a)
            lines.append(f"I{part(s.name)} {self.inside(a)} {self.inside(b)} dc {number(abs(value))}")
        return lines

    def controls(self) -> list[str]:
        """Return ideal common-mode controls, as elements of the bench.

        Currents in proportion to the errors flow into a node where nothing else takes them, so the errors cancel, at
        every frequency; the gate follows that node.
        """
        top, lines = self.circuit.topology, []
        for c in top.controls:
            share = number(LOOP / len(c.senses))
            lines += [
                f"Gcontrol_{self.inside(x)} 0 {self.control_node(c.node)} {self.outside(x)} {REFERENCE} {share}"
                for x in c.senses
            ]
            lines.append(f"E{self.inside(c.node)} {self.outside(c.node)} 0 {self.control_node(c.node)} 0 1")
        return lines

    @staticmethod
    def control_node(node: str) -> str:
        """Return the node that a controlled one follows."""
        return f"{node}_control"

    def nodesets(self, voltages: Mapping[str, float], twins: Mapping[str, str], held: bool) -> list[str]:
        """Return where the simulator shall begin.

        Args:
            voltages: of all nodes of the stage by name.
            twins: nodes inside the subcircuit that are where others of it are.
            held: whether the bench has the instance whose outputs are held.
        """
        top = self.circuit.topology
        at = {self.control_node(n) if n in self.controlled else self.outside(n): voltages[n] for n in top.unknown}
        inside = {self.inside(node): voltage for node, voltage in voltages.items()}
        at |= {f"x{STAGE}.{twin}": inside[node] for twin, node in twins.items()}
        if held:
            at |= {n.replace(f"x{STAGE}.", f"x{HELD}."): v for n, v in at.items() if n.startswith(f"x{STAGE}.")}
        parts = [f"v({name})={voltage:.6f}" for name, voltage in at.items()]
        return [f".nodeset {' '.join(parts[i : i + 4])}" for i in range(0, len(parts), 4)]


def wrapped(line: str) -> list[str]:
    """Return a line with what does not fit into it continued on further ones."""
    words, lines = line.split(" "), [""]
    for word in words:
        if len(lines[-1]) + len(word) >= _LINE and lines[-1].strip("+ "):
            lines.append("+")
        lines[-1] += f" {word}" if lines[-1] else word
    return lines


def joined(parts: Sequence[Sequence[str]]) -> list[str]:
    """Return blocks of lines with an empty line between them; blocks without lines are left out."""
    lines: list[str] = []
    for block in parts:
        if block:
            lines += [*([""] if lines else []), *block]
    return lines
