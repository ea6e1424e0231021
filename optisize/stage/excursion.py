"""How far a stage can be driven: the drive at which the first of its margins vanishes, by a bordered Newton iteration.

Node voltages and drive amplitude are solved together: each step solves the linearised circuit once with two right
hand sides, the residual and the drive, and moves the amplitude to where the nearest margin is predicted to vanish.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from optisize.process.law import Array, Drain, Saturation
from optisize.stage.bias import LEAK
from optisize.stage.circuit import Circuit
from optisize.stage.linear import solve

STEERED = 0.01  # the part of the pair's current below which an input transistor counts as off
ITERATIONS = 25
STEP_LIMIT = 0.6  # V, of any node in one step
SETTLED = 1e-4  # V; the step after which the next one would be a thousandth of it (convergence is quadratic)


@dataclass(frozen=True)
class Excursion:
    """Where the drive ends.

    Attributes:
        v: node voltages at the end, (A, N).
        amplitude: of the drive [V], (N,).
        found: whether the end was found, (N,) of bool.
    """

    v: Array
    amplitude: Array
    found: NDArray[np.bool_]


def follow(circuit: Circuit, start: Array, drive: Array, sign: Array) -> Excursion:
    """Raise a drive from the operating point until the first margin vanishes.

    Margins are vds - vdsat of every transistor that has to be saturated, and the current of each input transistor
    above 1 % of the pair's: beyond it the pair is steered and the output no longer moves.

    Args:
        circuit: N designs.
        start: node voltages at the operating point, (A, N).
        drive: pattern over all nodes, (A,), zero on the unknown ones.
        sign: direction of the drive for each design, (N,).
    """
    v, amplitude = start.copy(), np.zeros(circuit.designs)
    found = np.zeros(circuit.designs, dtype=bool)
    active: NDArray[np.intp] = np.arange(circuit.designs)
    part, pv, pa, ps = circuit, v.copy(), amplitude.copy(), sign
    for _ in range(ITERATIONS):
        done = _step(part, pv, pa, drive, ps)
        if done.all() or 3 * np.count_nonzero(done) > len(done):
            v[:, active[done]], amplitude[active[done]] = pv[:, done], pa[done]
            found[active[done]] = True
            left = np.flatnonzero(~done)
            active = active[left]
            if not len(active):
                break
            part, pv, pa, ps = part.take(left), pv[:, left], pa[left], ps[left]
    return Excursion(v=v, amplitude=amplitude, found=found)


def _step(circuit: Circuit, v: Array, amplitude: Array, drive: Array, sign: Array) -> NDArray[np.bool_]:
    """Move node voltages and amplitude in place by one damped step; return which designs have settled, (N,)."""
    unknowns = circuit.wiring.unknowns
    terminals = circuit.terminals(v)
    drain, saturation = circuit.law.drain_and_saturation(*terminals)
    toward = _responses(circuit, v, drain, drive, sign)
    margin, settle, rise = _margins(circuit, terminals, drain, saturation, toward)
    step = np.maximum(_amplitude_step(margin + settle, rise), -amplitude)
    change = toward[:unknowns, 0] + step * toward[:unknowns, 1]
    moved = np.abs(change).max(axis=0)
    finite = np.isfinite(moved)
    damping = np.where(finite, np.minimum(1.0, STEP_LIMIT / np.maximum(moved, 1e-30)), 0.0)
    v[:unknowns] += np.where(finite, change * damping, 0.0)
    amplitude += np.where(finite, step * damping, 0.0)
    driven = drive[unknowns:, None] * sign
    v[unknowns:] += driven * np.where(finite, step * damping, 0.0)
    return moved < SETTLED


def _responses(circuit: Circuit, v: Array, drain: Drain, drive: Array, sign: Array) -> Array:
    """Return how all nodes move (A, 2, N): to settle the residual, and with the amplitude of the drive."""
    unknowns = circuit.wiring.unknowns
    matrix = circuit.jacobian(drain)
    matrix[np.arange(unknowns), np.arange(unknowns)] += LEAK
    pull = circuit.driven_slopes(drain, drive[:, None])[:, 0] * sign
    right = -np.stack([circuit.residual(v, drain), pull], axis=1)
    toward = np.zeros((v.shape[0], 2, v.shape[1]))
    toward[:unknowns] = solve(matrix, right, circuit.wiring.conductance_pattern)
    toward[unknowns:, 1] = drive[unknowns:, None] * sign
    return toward


def _margins(
    circuit: Circuit, terminals: tuple[Array, Array, Array], drain: Drain, saturation: Saturation, toward: Array
) -> tuple[Array, Array, Array]:
    """Return the margins (K, N), how they settle with the residual, and how they rise with the amplitude."""
    rows = circuit.wiring.saturating
    pair = circuit.wiring.pair
    _, vd, vs = terminals
    dg, dd, ds = circuit.terminals(toward)
    room = (vd - vs - saturation.vdsat)[rows]
    by_gate, by_source = saturation.by_gate[rows, None], saturation.by_source[rows, None]
    room_change = (dd - ds)[rows] - by_gate * dg[rows] - by_source * ds[rows]
    current = drain.id[pair]
    total = current.sum(axis=0)
    change = drain.gm[pair, None] * dg[pair] + drain.gds[pair, None] * dd[pair] - drain.gms[pair, None] * ds[pair]
    share = np.maximum(current / total, 1e-9)
    root = np.sqrt(share)
    share_change = (change - share[:, None] * change.sum(axis=0)) / total
    steering = root - np.sqrt(STEERED)
    steering_change = share_change / (2.0 * root[:, None])
    margin = np.concatenate([room, steering])
    both = np.concatenate([room_change, steering_change])
    return margin, both[:, 0], both[:, 1]


def _amplitude_step(margin: Array, rise: Array) -> Array:
    """Return the step (N,) to where the first margin that falls with the drive is predicted to vanish."""
    falling = rise < 0.0
    steps = np.where(falling, -margin / np.where(falling, rise, -1.0), np.inf)
    nearest = steps.min(axis=0)
    return np.where(np.isfinite(nearest), nearest, 0.1)
