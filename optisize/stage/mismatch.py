"""Mismatch of a stage: its spreads, what they do to first order about the matched point, and sampled circuits.

Every transistor varies by itself in threshold and current factor, every resistor in its resistance. The spread of a
difference between two is that of Pelgrom, Duinmaijer and Welbers, "Matching properties of MOS transistors", IEEE JSSC
24, 1989, A / sqrt(W L); each of the two has its square root of a half. Distance and gradients are left to the layout.

The common-mode gain is that with the offset taken out by the input, as in use: without it a stage of high gain would
stand at a rail. To first order it needs the second derivatives of the currents in one direction, the answer to the
common mode; they come from the law itself at two points along it.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from optisize.process.law import Array
from optisize.stage.analysis import Analysis
from optisize.stage.bias import OperatingPoint
from optisize.stage.circuit import Circuit
from optisize.stage.nulling import null
from optisize.stage.response import adjoint_solve, response

ALONG = 1e-4  # V; half the distance of the two points of the second derivatives


class Deviations(NamedTuple):
    """Deviations, or their spreads: of thresholds [V] and current factors (T, N), of resistances (R, N), relative."""

    threshold: Array
    factor: Array
    resistance: Array


def spreads(circuit: Circuit) -> Deviations:
    """Return the standard deviation of every transistor and resistor by itself."""
    p, r = circuit.parameters, circuit.process.resistor
    root = np.sqrt(2.0 * circuit.width * circuit.units * circuit.length)
    area = np.maximum(circuit.resistor_lengths * r.width, 1e-30)
    return Deviations(p["threshold_matching"] / root, p["factor_matching"] / root, r.matching / np.sqrt(2.0 * area))


@dataclass(frozen=True)
class Effects:
    """What a deviation of one in each parameter does, to first order: to the output voltage and common-mode gain."""

    output: Deviations
    common: Deviations


def effects(a: Analysis) -> Effects:
    """Return what each deviation does to the output at rest, and to the common-mode gain with the offset taken out."""
    return a.once("effects", lambda: _effects(a))


def _effects(a: Analysis) -> Effects:
    r, t = response(a, 0.0), len(a.wiring.transistors)
    ends = slice(t, t + len(a.wiring.resistors))
    polarity = a.wiring.polarity
    # A current from first to second end of a branch, times this, is the change of the output.
    weight = -r.branches
    channel, resistor = weight[:t] * polarity, weight[ends]
    through = a.terminals.linear * a.circuit.network.conductances
    through = through[: len(a.wiring.resistors)]
    output = Deviations(-channel * a.drain.gm, channel * a.drain.id, -resistor * through)

    common = a.circuit.network.terminals(_full(a, 1))
    bent, slope = _second_derivatives(a, common)
    # What a shift of the operating point does to the common-mode gain, and, since the input takes the offset out, what
    # the shift that restores the output does with it.
    by_node = _by_node(a, channel * bent)
    unknowns = a.wiring.unknowns
    answer = (by_node * _full(a, 0)).sum(axis=0) / a.adm
    right = by_node[:unknowns] - a.wiring.output_weights[:, None] * answer
    shift = adjoint_solve(a, a.matrix, right[:, None])[:, 0]
    moved = -(a.wiring.current_stamp[:unknowns].T @ shift)
    moved_channel, moved_resistor = moved[:t] * polarity, moved[ends]
    # A higher threshold is a lower gate: its direct effect is that of the gate's slope.
    gate = -channel * bent[0] - moved_channel * a.drain.gm
    factor = channel * slope + moved_channel * a.drain.id
    conductance = resistor * (common.linear * a.circuit.network.conductances)[: len(through)]
    return Effects(output, Deviations(gate, factor, -conductance - moved_resistor * through))


def _full(a: Analysis, drive: int) -> Array:
    """Return how all nodes move with a drive of the analysis, (A, N)."""
    moved = np.zeros((len(a.wiring.nodes), a.circuit.designs)) + a.drives[:, drive, None]
    moved[: a.wiring.unknowns] = a.responses[:, drive]
    return moved


def _second_derivatives(a: Analysis, along: tuple[Array, ...]) -> tuple[Array, Array]:
    """Return how the derivatives to gate, drain and source change along a direction (3, T, N), and the slope along it.

    Args:
        a: N designs.
        along: gate, drain and source voltages of the direction.
    """
    rest, law = a.terminals.of_law, a.circuit.law
    ends = [law.drain(*(x + sign * ALONG * d for x, d in zip(rest, along[:3], strict=True))) for sign in (1.0, -1.0)]
    bent = [(getattr(ends[0], n) - getattr(ends[1], n)) / (2.0 * ALONG) for n in ("gm", "gds", "gms")]
    gate, drain, source = along[:3]
    slope = a.drain.gm * gate + a.drain.gds * drain - a.drain.gms * source
    return np.array([bent[0], bent[1], -bent[2]]), slope


def _by_node(a: Analysis, by_terminal: Array) -> Array:
    """Return what depends on terminals (3, T, N) as it depends on nodes, (A, N)."""
    t = len(a.wiring.transistors)
    return a.wiring.terminal_stamp[: 3 * t].T @ by_terminal.reshape(3 * t, -1)


def _sigma(of: Deviations, spread: Deviations) -> Array:
    return np.sqrt(sum(((x * s) ** 2).sum(axis=0) for x, s in zip(of, spread, strict=True)))


def offset_sigma(a: Analysis) -> Array:
    """Return the standard deviation of the input-referred offset [V], (N,); zero for a sample, which has its own."""
    if not a.matched:
        return np.zeros(a.circuit.designs)
    return _sigma(effects(a).output, spreads(a.circuit)) / np.abs(a.adm)


def common_gain_sigma(a: Analysis) -> Array:
    """Return the standard deviation of the gain from the common mode to the output, (N,); zero for a sample."""
    if not a.matched:
        return np.zeros(a.circuit.designs)
    return _sigma(effects(a).common, spreads(a.circuit))


def varied(circuit: Circuit, deviations: Deviations) -> Circuit:
    """Return a circuit with deviations of every transistor and resistor, each (T, N) or (R, N)."""
    p = dict(circuit.parameters)
    p["threshold"] = p["threshold"] + deviations.threshold
    p["current_factor"] = p["current_factor"] * (1.0 + deviations.factor)
    conductances = circuit.network.conductances.copy()
    conductances[: len(deviations.resistance)] /= 1.0 + deviations.resistance
    law = circuit.law_with(p)
    return replace(circuit, parameters=p, network=replace(circuit.network, law=law, conductances=conductances))


class Sampled(Analysis):
    """Circuits with deviations, each at the input that takes its offset out."""

    matched = False

    def __init__(self, circuit: Circuit, matched: Analysis) -> None:
        """Solve samples of one design.

        Args:
            circuit: N samples.
            matched: the analysis of the design without deviations.
        """
        super().__init__(circuit)
        start = np.repeat(matched.point.v[:, :1], circuit.designs, axis=1)
        rest = np.full(circuit.designs, matched.wiring.output(matched.point.v[:, 0]))
        found = null(circuit.network, start, self.drives[:, 0], self.wiring.output_weights, rest)
        self.point = OperatingPoint(found.v, found.found)
        self.offset = found.input

    @property
    def alike(self) -> bool:
        """Mismatch leaves no two sides alike."""
        return False

    def take(self, columns: NDArray[np.intp]) -> Sampled:
        """Return the analysis of some of the samples."""
        part = object.__new__(Sampled)
        Analysis.__init__(part, self.circuit.take(columns))
        part.point = OperatingPoint(self.point.v[:, columns], self.point.converged[columns])
        part.offset = self.offset[columns]
        return part
