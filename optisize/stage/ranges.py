"""What a stage does under large inputs: the ends of its input range, linearity, and where the pair is steered."""

from __future__ import annotations

import numpy as np

from optisize.process.law import Array
from optisize.stage.analysis import Analysis
from optisize.stage.bias import settle
from optisize.stage.excursion import Ending, follow
from optisize.stage.linear import solve
from optisize.stage.wiring import Moving, held

LEAST_CURRENT = 0.5  # of the pair's current in the middle of the range; less is taken as the end of the range
BEYOND = 1.0  # V beyond the rails after which an end of the input range counts as none
HARMONIC_POINTS = (
    8  # of the static curve over half a period: harmonics 13 and 19 are the first to be taken for the third
)
DEPARTURE_STEPS = 6
DEPARTURE_DONE = 1e-4  # of the amplitude, relative
DEPARTURE_SETTLED = 1e-6  # V
STEEPEST, FLATTEST = 4.0, 0.5  # of the departure over the amplitude, on logarithmic axes: a square in the usual case


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
        ending = Ending(steered=False, current=least.astype(a.coarse))
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


def steering_voltage(a: Analysis) -> Array:
    """Return the differential input [V] at which one input transistor is left with 1 % of the pair's current, (N,)."""
    part, chosen, sign = _held(a)
    start = a.point.v[part.nodes].take(chosen, axis=1).astype(a.coarse)
    network = a.circuit.network.part(part)
    network = (network.single if a.coarse is np.float32 else network).take(chosen)
    drive = a.drives[part.nodes, 0].astype(a.coarse)
    end = follow(network, start, None, drive, sign.astype(a.coarse), Ending(saturated=False))
    return _nearer(a, np.where(end.found, end.amplitude, np.nan).astype(np.float64))


def linear_range(a: Analysis, departure: float) -> Array:
    """Return the differential input [V], either way, at which the current into held outputs departs from its tangent.

    Args:
        a: N designs.
        departure: of the current from the tangent at rest, relative.

    Returns:
        (N,); not a number where it was not found.
    """
    part, chosen, sign = _held(a)
    network = a.circuit.network.part(part).take(chosen)
    w, start = part.wiring, a.point.v[part.nodes].take(chosen, axis=1)
    drive = a.drives[part.nodes, 0]
    weights = np.zeros(len(w.nodes))
    for node, weight in a.topology.output:
        weights[w.index[node]] = weight
    out = weights @ w.current_stamp

    def current(v: Array) -> Array:
        terminals = network.terminals(v)
        return out @ network.branch_currents(terminals, network.law.drain(*terminals.of_law))

    rest, tangent = current(start), _tangent(a, part, weights)[chosen]
    reach = 0.5 * a.drain.id[a.wiring.pair].sum(axis=0)[chosen] / np.abs(tangent)
    amplitude = 0.3 * reach * np.sqrt(departure / 0.01) * len(a.topology.output)
    v, nodes = start.copy(), slice(w.unknowns, None)
    log_last = log_far_last = np.full(len(chosen), np.nan)
    for _ in range(DEPARTURE_STEPS):
        v[nodes] = start[nodes] + drive[nodes, None] * (sign * amplitude)
        v = settle(network, v, DEPARTURE_SETTLED).v
        gone = np.abs((current(v) - rest) / (tangent * sign * amplitude) - 1.0)
        log_here, log_far = np.log(amplitude), np.log(np.maximum(gone, 1e-12) / departure)
        with np.errstate(all="ignore"):
            slope = (log_far - log_far_last) / (log_here - log_last)
        slope = np.where((slope > FLATTEST) & (slope < STEEPEST), slope, 2.0)
        log_last, log_far_last = log_here, log_far
        step = np.clip(-log_far / slope, -1.5, 1.0)
        amplitude = np.exp(log_here + step)
    return _nearer(a, np.where(np.abs(step) < DEPARTURE_DONE, amplitude, np.nan))


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
        output = w.output(end.v)
        first += output * np.cos(angle)
        third += output * np.cos(3.0 * angle)
        solved &= end.converged
    return np.where(solved, np.abs(third / first), np.nan)


def _held(a: Analysis) -> tuple[Moving, np.ndarray, Array]:
    """Return the part with held outputs, and which designs are driven which way: both ways where the sides differ."""
    every = np.arange(a.circuit.designs)
    if a.alike:
        return held(a.topology), every, np.ones(len(every))
    return held(a.topology), np.concatenate([every, every]), np.repeat([-1.0, 1.0], len(every))


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
