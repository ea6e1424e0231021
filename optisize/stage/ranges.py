"""What a stage does under large inputs: the ends of its input range, linearity, and where the pair is steered."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from optisize.process.law import Array
from optisize.stage.active import Active
from optisize.stage.analysis import Analysis
from optisize.stage.bias import operating_point, settle
from optisize.stage.excursion import STEERED, Ending, follow
from optisize.stage.linear import solve
from optisize.stage.network import Network
from optisize.stage.wiring import Moving
from optisize.stage.wiring import held as held_part

LEAST_CURRENT = 0.5  # of the pair's current in the middle of the range; less is taken as the end of the range
SETTLED = 3e-3  # V; the step of an amplitude after which the next one would be some 0.1 mV
BEYOND = 1.0  # V beyond the rails after which an end of the input range counts as none
HARMONIC_POINTS = 8  # of the static curve over half a period: the 13th is the first harmonic taken for the third
REACH_STEPS = 24
REACHED = 2e-4  # of the amplitude, relative
DRIVEN_SETTLED = 1e-6  # V
STEEPEST, FLATTEST = 4.0, 0.5  # of the departure over the amplitude, on logarithmic axes: a square in the usual case
FARTHEST = 6.0  # an excess beyond it says no more than its sign


def input_range(a: Analysis) -> tuple[Array, Array]:
    """Return the lowest and the highest common-mode input voltage [V], each (N,).

    Up to where the first transistor that has to be saturated no longer is, or the pair carries less than half of its
    current in the middle of the range. The middle itself where that is out of saturation; unlimited where nothing ends
    the range within a volt of the rails.
    """
    return a.once("input range", lambda: _input_range(a))


def _input_range(a: Analysis) -> tuple[Array, Array]:
    conditions, part = a.circuit.conditions, a.moving[0]
    ends = np.full((2, a.circuit.designs), conditions.middle)
    columns = np.flatnonzero(a.room_at_rest > 0.0)
    if len(columns):
        twice = np.concatenate([columns, columns])
        sign = np.repeat([-1.0, 1.0], len(columns))
        least = LEAST_CURRENT * a.drain.id[a.wiring.pair].sum(axis=0)[twice]
        ending = Ending(steered=False, current=least.astype(a.coarse), settled=SETTLED)
        end = follow(
            a.moving[1].take(twice),
            a.point.v[part.nodes].take(twice, axis=1).astype(a.coarse),
            a.moving_at_rest(1).take(twice, a.coarse),
            a.drives[part.nodes, 1].astype(a.coarse),
            sign.astype(a.coarse),
            ending,
        )
        reach = conditions.middle + sign * end.amplitude
        reached = end.found & (reach > -BEYOND) & (reach < conditions.supply + BEYOND)
        ends[:, columns] = np.where(reached, reach, sign * np.inf).reshape(2, -1)
    return ends[0], ends[1]


@np.errstate(all="ignore")
def steering_voltage(a: Analysis) -> Array:
    """Return the differential input [V] at which one input transistor is left with 1 % of the pair's current, (N,)."""
    part, chosen, sign = _held(a)
    start = a.point.v[part.nodes].take(chosen, axis=1).astype(a.coarse)
    network = a.circuit.network.part(part)
    coarse = (network.single if a.coarse is np.float32 else network).take(chosen)
    drive = a.drives[part.nodes, 0].astype(a.coarse)
    end = follow(coarse, start, None, drive, sign.astype(a.coarse), Ending(saturated=False, settled=SETTLED))
    amplitude = np.where(end.found, end.amplitude, np.nan).astype(np.float64)
    missed = np.flatnonzero(~end.found)
    if len(missed):  # a pair on large resistors steers so suddenly that its slope at rest says little

        def excess(held: _Held, v: Array, here: Array) -> Array:
            return np.log(STEERED / held.least_share(v, here))

        every, guess = _at_rest(a, part, chosen, sign)
        amplitude[missed] = _reached(every.take(missed), 2.0 * guess[missed], excess)
    return _nearer(a, amplitude)


@np.errstate(all="ignore")
def linear_range(a: Analysis, departure: float) -> Array:
    """Return the differential input [V], either way, at which the current into held outputs departs from its tangent.

    Args:
        a: N designs.
        departure: of the current from the tangent at rest, relative.

    Returns:
        (N,); not a number where it was not found.
    """
    held, steered = _at_rest(a, *_held(a))

    def excess(held: _Held, v: Array, here: Array) -> Array:
        return np.log(np.maximum(held.departure(v, here), 1e-12) / departure)

    return _nearer(a, _reached(held, 0.3 * steered * np.sqrt(departure / 0.01), excess))


def _at_rest(a: Analysis, part: Moving, chosen: NDArray[np.intp], sign: Array) -> tuple[_Held, Array]:
    """Return designs with held outputs, and the input [V] at which the tangent at rest would steer them, (N,)."""
    weights = _output_weights(a, part)
    tangent = _tangent(a, part, weights)[chosen]
    steered = 0.5 * a.drain.id[a.wiring.pair].sum(axis=0)[chosen] / np.abs(tangent)
    network, start = a.circuit.network.part(part).take(chosen), a.point.v[part.nodes].take(chosen, axis=1)
    held = _Held(network, start, a.drives[part.nodes, 0], weights @ part.wiring.current_stamp, sign, tangent, sign)
    return replace(held, rest=held.current(start)), steered * len(a.topology.output)


@dataclass(frozen=True)
class _Held:
    """Designs with held outputs, driven from rest: what their current into the outputs departs from.

    Attributes:
        network, start: the part with held outputs, and its node voltages at rest, (A, N).
        drive, out: of the nodes, (A,), and of the branches into the output, (B,).
        sign, tangent, rest: direction of the drive, slope [S] and current at rest [A], (N,).
    """

    network: Network
    start: Array
    drive: Array
    out: Array
    sign: Array
    tangent: Array
    rest: Array

    def take(self, columns: NDArray[np.intp]) -> _Held:
        """Return some of the designs."""
        start = self.start.take(columns, axis=1)
        sign, tangent, rest = self.sign[columns], self.tangent[columns], self.rest[columns]
        return _Held(self.network.take(columns), start, self.drive, self.out, sign, tangent, rest)

    def current(self, v: Array) -> Array:
        """Return the current into the output at node voltages, (N,)."""
        terminals = self.network.terminals(v)
        return self.out @ self.network.branch_currents(terminals, self.network.law.drain(*terminals.of_law))

    def driven(self, v: Array, amplitude: Array) -> tuple[Array, NDArray[np.bool_]]:
        """Return node voltages at an amplitude, from a guess, and whether they were found, (N,) of bool."""
        driven = slice(self.network.wiring.unknowns, None)
        v[driven] = self.start[driven] + self.drive[driven, None] * (self.sign * amplitude)
        end = settle(self.network, v, DRIVEN_SETTLED)
        return end.v, end.converged

    def departure(self, v: Array, amplitude: Array) -> Array:
        """Return how far the current is from its tangent, relative, (N,)."""
        return np.abs((self.current(v) - self.rest) / (self.tangent * self.sign * amplitude) - 1.0)

    def least_share(self, v: Array, _amplitude: Array) -> Array:
        """Return the smaller share of the input transistors in their current, (N,)."""
        terminals = self.network.terminals(v)
        current = self.network.law.drain(*terminals.of_law).id[self.network.wiring.pair]
        return np.maximum(current.min(axis=0) / current.sum(axis=0), 0.0)


Excess = Callable[[_Held, Array, Array], Array]


def _reached(held: _Held, guess: Array, excess: Excess) -> Array:
    """Return the amplitude at which an excess vanishes, (N,); not a number where it was not found.

    The secant method on the logarithm of the amplitude, held within what is known to be too little and too much.

    Args:
        held: N designs.
        guess: first amplitude [V].
        excess: of a state, its node voltages and amplitude: below zero before the end, about 2 for each unit of the
            logarithm of the amplitude.
    """
    result = np.full(len(guess), np.nan)
    active, v, here = Active(len(guess)), held.start.copy(), np.log(guess)
    last = far_last = np.full(len(guess), np.nan)
    low, high = np.full(len(guess), -np.inf), np.full(len(guess), np.inf)
    for _ in range(REACH_STEPS):
        v, found = held.driven(v, np.exp(here))
        # Where no state is found the amplitude is taken as too large.
        far = np.clip(np.where(found, excess(held, v, np.exp(here)), np.inf), -FARTHEST, FARTHEST)
        low, high = np.where(far < 0.0, here, low), np.where(far > 0.0, here, high)
        slope = (far - far_last) / (here - last)
        slope = np.where((slope > FLATTEST) & (slope < STEEPEST), slope, 2.0)
        following = here + np.clip(-far / slope, -1.5, 1.0)
        following = np.where((following > low) & (following < high), following, 0.5 * (low + high))
        fresh = active.fresh(np.abs(following - here) < REACHED)
        result[active.designs(fresh)] = np.exp(following[fresh])
        last, far_last, here = here, far, following
        left = active.thinned()
        if left is not None:
            if not len(left):
                break
            held, v = held.take(left), v.take(left, axis=1)
            here, last, far_last, low, high = here[left], last[left], far_last[left], low[left], high[left]
    return result


def _output_weights(a: Analysis, part: Moving) -> Array:
    """Return the output as a combination of all nodes of a part, (A,)."""
    weights = np.zeros(len(part.wiring.nodes))
    for node, weight in a.topology.output:
        weights[part.wiring.index[node]] = weight
    return weights


def third_harmonic(a: Analysis, amplitude: float) -> Array:
    """Return third over first harmonic of the output for a slow sine at the differential input, (N,).

    Args:
        a: N designs.
        amplitude: peak of the sine [V].

    The static curve is taken at the Chebyshev points of the amplitude, where the sums below are its Fourier
    coefficients. Not a number where the sine asks for more than the supply at the output: that is clipping.
    """
    result = np.full(a.circuit.designs, np.nan)
    columns = np.flatnonzero(amplitude * np.abs(a.adm) < a.circuit.conditions.supply)
    if len(columns):
        part = a if len(columns) == a.circuit.designs else a.take(columns)
        result[columns] = _third_harmonic(part, amplitude)
    return result


def _third_harmonic(a: Analysis, amplitude: float) -> Array:
    part = a.moving[0]
    network = a.circuit.network.part(part)
    angles = (np.arange(HARMONIC_POINTS) + 0.5) * np.pi / HARMONIC_POINTS
    first, third = np.zeros(a.circuit.designs), np.zeros(a.circuit.designs)
    solved = np.ones(a.circuit.designs, dtype=bool)
    rest, w = a.point.v[part.nodes], part.wiring
    drive, toward = a.drives[part.nodes, 0], np.zeros((len(w.nodes), a.circuit.designs))
    toward[: w.unknowns] = a.responses[part.nodes[: w.unknowns], 0]
    toward[w.unknowns :] = drive[w.unknowns :, None]
    for angle in angles:
        start = rest + amplitude * np.cos(angle) * toward
        start[: w.unknowns] = np.clip(start[: w.unknowns], 0.0, a.circuit.conditions.supply)
        end = settle(network, start)
        v, found = end.v, end.converged
        if not found.all():  # the straight answer leads far beyond a clipped one
            v, found = _solved_again(a, part, v, found, amplitude * float(np.cos(angle)))
        output = w.output(v)
        first += output * np.cos(angle)
        third += output * np.cos(3.0 * angle)
        solved &= found
    return np.where(solved, np.abs(third / first), np.nan)


def _solved_again(
    a: Analysis, part: Moving, v: Array, found: NDArray[np.bool_], applied: float
) -> tuple[Array, NDArray[np.bool_]]:
    """Solve those that were not found from the topology's own first guess, at a differential input [V]."""
    missed = np.flatnonzero(~found)
    circuit, inputs = a.circuit.take(missed), a.point.v[[a.wiring.index["in+"], a.wiring.index["in-"]]][:, missed]
    again = operating_point(circuit, circuit.driven(inputs[0] + 0.5 * applied, inputs[1] - 0.5 * applied))
    v, found = v.copy(), found.copy()
    v[:, missed], found[missed] = again.v[part.nodes], again.converged
    return v, found


def _held(a: Analysis) -> tuple[Moving, NDArray[np.intp], Array]:
    """Return the part with held outputs, and which designs are driven which way: both ways where the sides differ."""
    every = np.arange(a.circuit.designs)
    if a.alike:
        return held_part(a.topology), every, np.ones(len(every))
    return held_part(a.topology), np.concatenate([every, every]), np.repeat([-1.0, 1.0], len(every))


def _nearer(a: Analysis, amplitude: Array) -> Array:
    """Return the smaller of the amplitudes of both directions, (N,)."""
    return amplitude if a.alike else amplitude.reshape(2, -1).min(axis=0)


def _tangent(a: Analysis, part: Moving, weights: Array) -> Array:
    """Return the change of the current into the held outputs over the differential input at rest [S], (N,)."""
    w = part.wiring
    t = len(a.wiring.transistors)
    rows = np.concatenate([k * t + part.transistors for k in range(3)] + [3 * t + part.linear])
    slopes = a.slopes[rows]
    matrix = (w.all_conductances.reshape(-1, len(rows)) @ slopes).reshape(len(w.nodes), len(w.nodes), -1)
    u, drive = w.unknowns, a.drives[part.nodes, 0]
    pull = np.einsum("uan,a->un", matrix[:u], drive)
    moved = np.zeros((len(w.nodes), a.circuit.designs)) + drive[:, None]
    moved[:u] = solve(matrix[:u, :u], -pull[:, None], w.conductance_pattern)[:, 0]
    return np.einsum("a,abn,bn->n", weights, matrix, moved)
