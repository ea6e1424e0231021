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
STEERED_SETTLED = 3e-4  # V; a pair in weak inversion steers within tens of millivolts
BEYOND = 1.0  # V beyond the rails after which an end of the input range counts as none
HARMONIC_POINTS = 8  # of the static curve over half a period: the 13th is the first harmonic taken for the third
REACH_STEPS = 16
REACHED = 2e-3  # of the amplitude, relative; the secant method leaves about its square, at a kink a tenth
DRIVEN_SETTLED = 1e-4  # V; what Newton leaves is about its square over 50 mV
DRIVEN_ITERATIONS = 12  # from one amplitude to the next
CURVE_SETTLED = 1e-5  # V
STEEPEST, FLATTEST = 4.0, 0.5  # of the departure over the amplitude, on logarithmic axes: a square in the usual case
FARTHEST = 6.0  # an excess beyond it says no more than its sign


def input_range(a: Analysis) -> tuple[Array, Array]:
    """Return the lowest and the highest common-mode input voltage [V], each (N,).

    Up to where the first transistor that has to be saturated no longer is, or the pair carries less than half of its
    current in the middle of the range. The middle itself where that is out of saturation; unlimited where nothing ends
    the range within a volt of the rails; not a number where neither was found.
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
        farthest = max(conditions.middle, conditions.supply - conditions.middle) + BEYOND
        ending = Ending(steered=False, current=least.astype(a.coarse), settled=SETTLED, farthest=farthest)
        end = follow(
            a.moving[1].take(twice),
            a.point.v[part.nodes].take(twice, axis=1).astype(a.coarse),
            a.moving_at_rest(1).take(twice, a.coarse),
            a.drives[part.nodes, 1].astype(a.coarse),
            sign.astype(a.coarse),
            ending,
        )
        reach = conditions.middle + sign * end.amplitude
        beyond = (reach < -BEYOND) | (reach > conditions.supply + BEYOND)
        reach = np.where(beyond, sign * np.inf, np.where(end.found, reach, np.nan))
        ends[:, columns] = reach.reshape(2, -1)
    return ends[0], ends[1]


@np.errstate(all="ignore")
def steering_voltage(a: Analysis) -> Array:
    """Return the differential input [V] that leaves one input transistor with 1 % of the pair's current, (N,).

    The drains of the pair are held at rest.
    """
    part, chosen, sign = _held(a)
    network = a.circuit.network.part(part)
    network = (network.single if a.coarse is np.float32 else network).take(chosen)
    start = a.point.v[part.nodes].take(chosen, axis=1).astype(a.coarse)
    drive = a.drives[part.nodes, 0].astype(a.coarse)
    end = follow(network, start, None, drive, sign.astype(a.coarse), Ending(saturated=False, settled=STEERED_SETTLED))
    amplitude = np.where(end.found, end.amplitude, np.nan).astype(np.float64)
    missed = np.flatnonzero(~end.found)
    if len(missed):  # a pair on large resistors steers so suddenly that its slope at rest says little
        every, steered = _at_rest(a, part, chosen, sign)
        amplitude[missed] = _reached(every.take(missed), steered[missed], _Held.beyond_steering)
    return _nearer(a, amplitude)


@np.errstate(all="ignore")
def linear_range(a: Analysis, departure: float) -> Array:
    """Return the differential input [V], either way, at which the pair's difference departs from its tangent.

    The difference is that of the currents of the input transistors, their drains held at rest.

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
    """Return designs with held drains, and the input [V] at which the tangent at rest would steer them, (N,)."""
    slope, moved = _tangent(a, part)
    tangent = slope[chosen]
    steered = a.drain.id[a.wiring.pair].sum(axis=0)[chosen] / np.abs(tangent)
    network, start = a.circuit.network.part(part).take(chosen), a.point.v[part.nodes].take(chosen, axis=1)
    held = _Held(network, start, moved.take(chosen, axis=1), a.drives[part.nodes, 0], sign, tangent, sign)
    return replace(held, rest=held.current(start)), steered


@dataclass(frozen=True)
class _Held:
    """Designs with held drains of the pair, driven from rest: what the difference of its currents departs from.

    Attributes:
        network, start: the part with held drains, and its node voltages at rest, (A, N).
        toward: how the nodes move with the drive at rest, (A, N).
        drive: of the nodes, (A,).
        sign, tangent, rest: direction of the drive, slope [S] and difference at rest [A], (N,).
    """

    network: Network
    start: Array
    toward: Array
    drive: Array
    sign: Array
    tangent: Array
    rest: Array

    def take(self, columns: NDArray[np.intp]) -> _Held:
        """Return some of the designs."""
        start, toward = self.start.take(columns, axis=1), self.toward.take(columns, axis=1)
        sign, tangent, rest = self.sign[columns], self.tangent[columns], self.rest[columns]
        return _Held(self.network.take(columns), start, toward, self.drive, sign, tangent, rest)

    def current(self, v: Array) -> Array:
        """Return the difference of the pair's currents at node voltages, (N,)."""
        positive, negative = self.network.law.drain(*self.network.terminals(v).of_law).id[self.network.wiring.pair]
        return positive - negative

    def driven(self, v: Array, amplitude: Array) -> tuple[Array, NDArray[np.bool_]]:
        """Return node voltages at an amplitude, from a guess, and whether they were found, (N,) of bool."""
        driven = slice(self.network.wiring.unknowns, None)
        v[driven] = self.start[driven] + self.drive[driven, None] * (self.sign * amplitude)
        end = settle(self.network, v, DRIVEN_SETTLED, DRIVEN_ITERATIONS)
        return end.v, end.converged

    def departure(self, v: Array, amplitude: Array) -> Array:
        """Return how far the current is from its tangent, relative, (N,)."""
        return np.abs((self.current(v) - self.rest) / (self.tangent * self.sign * amplitude) - 1.0)

    def beyond_steering(self, v: Array, _amplitude: Array) -> Array:
        """Return by how much the pair is steered beyond 1 %, as roots, (N,)."""
        current = self.network.law.drain(*self.network.terminals(v).of_law).id[self.network.wiring.pair]
        share = np.maximum(current.min(axis=0) / current.sum(axis=0), 0.0)
        return STEEPEST * (np.sqrt(STEERED) - np.sqrt(share))


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
    active, here, unknowns = Active(len(guess)), np.log(guess), held.network.wiring.unknowns
    v = held.start + (held.sign * guess) * held.toward
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
        v[:unknowns] = held.start[:unknowns] + (v[:unknowns] - held.start[:unknowns]) * np.exp(following - here)
        last, far_last, here = here, far, following
        left = active.thinned()
        if left is not None:
            if not len(left):
                break
            held, v = held.take(left), v.take(left, axis=1)
            here, last, far_last, low, high = here[left], last[left], far_last[left], low[left], high[left]
    return result


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
    """Return third over first harmonic; where both sides are alike, one half of the curve tells the other."""
    part = a.moving[0]
    network, w = a.circuit.network.part(part), part.wiring
    points = np.cos((np.arange(HARMONIC_POINTS) + 0.5) * np.pi / HARMONIC_POINTS)
    half = points[points > 0.0][::-1]
    first, third = np.zeros(a.circuit.designs), np.zeros(a.circuit.designs)
    solved = np.ones(a.circuit.designs, dtype=bool)
    toward = np.zeros((len(w.nodes), a.circuit.designs)) + a.drives[part.nodes, 0, None]
    toward[: w.unknowns] = a.responses[part.nodes[: w.unknowns], 0]
    for side in (1.0,) if a.alike else (1.0, -1.0):
        rest, reached, last = a.point.v[part.nodes], toward, 1.0
        for cosine in half:  # outwards: each point begins on the chord of the one before
            applied = side * amplitude * cosine
            v, found = _on_curve(a, part, network, rest + (applied / last) * reached, applied)
            reached, last = v - rest, applied
            output = w.output(v)
            if a.alike:
                output = output - w.output(v, mirrored=True)
            first += side * output * cosine
            third += side * output * (4.0 * cosine**3 - 3.0 * cosine)
            solved &= found
    return np.where(solved, np.abs(third / first), np.nan)


def _on_curve(
    a: Analysis, part: Moving, network: Network, start: Array, applied: float
) -> tuple[Array, NDArray[np.bool_]]:
    """Return node voltages of a part at a differential input [V], from a guess, and which of them were found."""
    unknowns = part.wiring.unknowns
    start[:unknowns] = np.clip(start[:unknowns], 0.0, a.circuit.conditions.supply)
    end = settle(network, start, CURVE_SETTLED)
    if end.converged.all():
        return end.v, end.converged
    return _solved_again(a, part, end.v, end.converged, applied)  # a straight guess leads far beyond a clipped answer


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
    """Return the part with held drains, and which designs are driven which way: both ways where mismatch is in them."""
    every = np.arange(a.circuit.designs)
    if a.matched:
        return held_part(a.topology), every, np.ones(len(every))
    return held_part(a.topology), np.concatenate([every, every]), np.repeat([-1.0, 1.0], len(every))


def _nearer(a: Analysis, amplitude: Array) -> Array:
    """Return the smaller of the amplitudes of both directions, (N,)."""
    return amplitude if a.matched else np.fmin(*amplitude.reshape(2, -1))


def _tangent(a: Analysis, part: Moving) -> tuple[Array, Array]:
    """Return how the difference of the pair's currents [S], (N,), and the nodes, (A, N), move with the input."""
    w, t, u = part.wiring, len(a.wiring.transistors), part.wiring.unknowns
    slopes = a.slopes[np.concatenate([k * t + part.transistors for k in range(3)] + [3 * t + part.linear])]
    matrix = (w.conductance_stamp.reshape(-1, len(slopes)) @ slopes).reshape(u, len(w.nodes), -1)
    moved = np.zeros((len(w.nodes), a.circuit.designs)) + a.drives[part.nodes, 0, None]
    pull = np.einsum("uan,a->un", matrix, a.drives[part.nodes, 0])
    moved[:u] = solve(matrix[:, :u], -pull[:, None], w.conductance_pattern)[:, 0]
    change = a.circuit.network.part(part).terminals(moved)
    gate, drain, source = (x[w.pair] for x in change.of_law)
    pair = a.wiring.pair
    flow = a.drain.gm[pair] * gate + a.drain.gds[pair] * drain - a.drain.gms[pair] * source
    return flow[0] - flow[1], moved
