"""What is written at the parts of a schematic: names, drawn sizes, currents, voltages at rest."""

from __future__ import annotations

from collections.abc import Mapping

from optisize.front.details import Details
from optisize.problem.evaluate import Problem
from optisize.process.law import Array
from optisize.quantities import write, write_in
from optisize.show.schematic_layout import Lines, Texts
from optisize.stage.analysis import Analysis

DIGITS = 6  # of what is drawn, so that nothing of the grid is lost


def micrometres(length: float) -> str:
    """Return a drawn length, always in um."""
    return write_in(length, "um", DIGITS)


def drawn_texts(problem: Problem, sizes: Mapping[str, Array], found: Details, *, wrapped: bool) -> Texts:
    """Return what is written at the parts of the schematic of one design.

    Args:
        problem: its own.
        sizes: every size, each (1,).
        found: the same design in detail.
        wrapped: whether a channel length has a line of its own, for narrow labels.
    """
    topology, r, ports = problem.topology, found.resistors, port_texts(problem, sizes)
    resistors = {
        name: (name, write(float(r.resistance[i, 0]), "ohm", DIGITS), f"{float(r.squares[i, 0]):.6g} squares")
        for i, name in enumerate(r.names)
    }
    return Texts(
        transistors={name: _transistor(found, i, wrapped) for i, name in enumerate(found.transistors.names)},
        resistors=resistors,
        sources={s.name: (s.size, write(float(sizes[s.size][0]), "A", DIGITS)) for s in topology.sources},
        controls={c.name: ("ideal", "control") for c in topology.controls},
        ports=ports,
        nodes={node: text for node, text in node_voltages(problem, sizes).items() if node not in ports},
    )


def _transistor(found: Details, i: int, wrapped: bool) -> Lines:
    t = found.transistors
    units, fingers = float(t.units[i, 0]), float(t.fingers[i, 0])
    shape = f"{fingers:.0f} x {micrometres(float(t.finger_width[i, 0]))}"
    length = f"/ {micrometres(float(t.length[i, 0]))}"
    several = (f"{units:.0f} units of",) if units > 1.0 else ()
    return (t.names[i], *several, *((shape, length) if wrapped else (f"{shape} {length}",)))


def node_voltages(problem: Problem, sizes: Mapping[str, Array]) -> dict[str, str]:
    """Return the voltage at rest of every node that is solved for, as text."""
    a = Analysis(problem.circuit(sizes))
    return {node: write(float(a.point.v[a.wiring.index[node], 0]), "V") for node in problem.topology.unknown}


def port_texts(problem: Problem, sizes: Mapping[str, Array]) -> dict[str, str]:
    """Return what is written at the inputs, the outputs, the rails and the reference of a control."""
    c, voltages, output = problem.conditions, node_voltages(problem, sizes), problem.topology.output
    middle = write(c.middle, "V")
    texts = {"in+": f"in+  {middle}", "in-": f"in-  {middle}"}
    texts |= {"supply": f"supply {write(c.supply, 'V')}", "ground": "ground"}
    for node, sign in output:
        name = "out" if len(output) == 1 else "out+" if sign > 0.0 else "out-"
        texts[node] = f"{name}  {voltages[node]}"
    if c.output_common_mode is not None:
        texts["reference"] = f"output common\nmode {write(c.output_common_mode, 'V')}"
    return texts
