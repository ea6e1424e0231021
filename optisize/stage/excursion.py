"""How far a stage can be driven: the drive at which the first of its margins vanishes, by a bordered Newton iteration.

Node voltages and drive amplitude are solved together: each step solves the linearised circuit once with two right
hand sides, the residual and the drive, and moves the amplitude to where the nearest margin is predicted to vanish.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any, NamedTuple, Self

import numpy as np
from numpy.typing import NDArray

from optisize.process.law import Array, Drain, Pick, Saturation
from optisize.stage.active import Active
from optisize.stage.bias import regular_solve
from optisize.stage.network import Equations, Network, Terminals

STEERED = 0.01  # the part of the pair's current below which an input transistor counts as off
ITERATIONS = 25
# The part of the way to full steering that the first step takes: the slope at rest leads a square-law pair to 1.71
# overdrives, beyond 1.41 where one side is off and has no slope to come back by.
CAUTION = 0.7
FREE_STEP = 0.1  # of the supply, where no margin falls: what nothing ends is driven far beyond the rails
STEP_LIMIT = 0.6  # V, of any node in one step
SETTLED = 1e-2  # V; the step after which the next one would be some 0.1 mV (convergence is quadratic)


@dataclass(frozen=True)
class Excursion:
    """Where the drive ends.

    Attributes:
        v: node voltages at the end, (A, N).
        amplitude: of the drive [V], (N,); of one without end, how far it was driven.
        found: whether the end was found, (N,) of bool.
    """

    v: Array
    amplitude: Array
    found: NDArray[np.bool_]


class Linearised(NamedTuple):
    """A stage at node voltages: terminals, transistors, and the equations with one drive."""

    terminals: Terminals
    drain: Drain
    saturation: Saturation
    equations: Equations

    def take(self, columns: NDArray[np.intp], dtype: Any) -> Linearised:
        """Return the same for some of the designs, in a precision."""

        def chosen(record: Any) -> Any:
            return type(record)(*(x.take(columns, axis=-1).astype(dtype, copy=False) for x in record))

        return Linearised(*(chosen(record) for record in self))


@dataclass(frozen=True)
class Ending:
    """Which margins end a drive.

    Attributes:
        saturated: whether the transistors that have to be saturated must stay so.
        steered: whether each input transistor must carry its least share of the pair's current.
        current: the least current of the pair [A], (N,), if any.
        settled: the step of the amplitude [V] after which it is known, where it is what is wanted.
        farthest: the amplitude [V] beyond which the drive counts as without end.
    """

    saturated: bool = True
    steered: bool = True
    current: Array | None = None
    settled: float = np.inf
    farthest: float = np.inf

    def take(self, columns: Pick) -> Self:
        """Return the same for some of the designs."""
        return self if self.current is None else replace(self, current=self.current[columns])


@np.errstate(all="ignore")
def follow(
    network: Network,
    start: Array,
    rest: Linearised | None,
    drive: Array,
    sign: Array,
    ending: Ending | None = None,
) -> Excursion:
    """Raise a drive from the operating point until the first margin vanishes.

    Margins are, unless `ending` says otherwise, vds - vdsat of every transistor that has to be saturated, and the
    current of each input transistor above 1 % of the pair's: beyond it the pair is steered and the output no longer
    moves.

    Args:
        network: N designs.
        start: node voltages at the operating point, (A, N).
        rest: the stage there, which saves the first step its linearisation.
        drive: pattern over all nodes, (A,), zero on the unknown ones.
        sign: direction of the drive for each design, (N,).
        ending: which margins count.
    """
    v, amplitude = start.copy(), np.zeros(network.designs, dtype=start.dtype)
    found = np.zeros(network.designs, dtype=bool)
    active, part, ends = Active(network.designs), network, ending or Ending()
    pv, pa, ps = v.copy(), amplitude.copy(), sign
    for iteration in range(ITERATIONS):
        here = rest if iteration == 0 and rest is not None else linearised(part, pv, drive)
        # The first step is straight from rest: however small it is, it does not know the curve.
        fresh = active.fresh(_step(part, here, pv, pa, drive, ps, ends, iteration == 0) & (iteration > 0))
        done = active.designs(fresh)
        v[:, done], amplitude[done], found[done] = pv.take(fresh, axis=1), pa[fresh], True
        endless = active.fresh(pa > ends.farthest)
        amplitude[active.designs(endless)] = pa[endless]
        left = active.thinned()
        if left is not None:
            if not len(left):
                break
            part, pv, pa, ps, ends = part.take(left), pv.take(left, axis=1), pa[left], ps[left], ends.take(left)
    return Excursion(v=v, amplitude=amplitude, found=found)


def linearised(network: Network, v: Array, drive: Array) -> Linearised:
    """Return a stage linearised at node voltages (A, N), with one drive (A,)."""
    terminals = network.terminals(v)
    drain, saturation = network.law.drain_and_saturation(*terminals.of_law)
    return Linearised(terminals, drain, saturation, network.equations(terminals, drain, drive[:, None]))


def _step(
    network: Network,
    here: Linearised,
    v: Array,
    amplitude: Array,
    drive: Array,
    sign: Array,
    ending: Ending,
    first: bool,
) -> NDArray[np.bool_]:
    """Move node voltages and amplitude in place by one damped step; return which designs have settled, (N,)."""
    unknowns = network.wiring.unknowns
    right = np.concatenate([here.equations.residual[:, None], here.equations.pulls * sign], axis=1)
    toward = np.zeros((v.shape[0], 2, v.shape[1]), dtype=v.dtype)
    toward[:unknowns] = regular_solve(network, here.equations.matrix, -right)
    toward[unknowns:, 1] = drive[unknowns:, None] * sign
    margin, settle, rise = _margins(network, here, toward, ending, first)
    onward = FREE_STEP * network.supply
    step = np.maximum(_amplitude_step(margin + settle, rise, amplitude, onward), -amplitude)
    change = toward[:, 0] + step * toward[:, 1]
    moved = np.abs(change[:unknowns]).max(axis=0)
    if not moved.max() < STEP_LIMIT:
        damping = np.where(np.isfinite(moved), STEP_LIMIT / np.maximum(moved, STEP_LIMIT), 0.0)
        step, change = (np.where(damping > 0.0, x * damping, 0.0) for x in (step, change))
    v += change
    amplitude += step
    # What the residual asks for and what the drive moves may cancel each other: both have to be small.
    return (np.maximum(moved, np.abs(toward[:unknowns, 0]).max(axis=0)) < SETTLED) & (np.abs(step) < ending.settled)


def _margins(
    network: Network, here: Linearised, toward: Array, ending: Ending, first: bool
) -> tuple[Array, Array, Array]:
    """Return the margins (K, N), how they settle with the residual, and how they rise with the amplitude."""
    change = network.terminals(toward)
    parts = [_saturation_margins(network, here, change)] if ending.saturated else []
    parts += _pair_margins(network, here, change, ending, CAUTION if first else 1.0)
    margin, both = (np.concatenate(rows) for rows in zip(*parts, strict=True))
    return margin, both[:, 0], both[:, 1]


def _saturation_margins(network: Network, here: Linearised, change: Terminals) -> tuple[Array, Array]:
    """Return vds - vdsat (K, N), and how it changes along both directions (K, 2, N)."""
    rows, saturation = network.wiring.saturating, here.saturation
    room = (here.terminals.vds - saturation.vdsat).take(rows, axis=0)
    moved = change.vds - saturation.by_gate[:, None] * change.gate - saturation.by_source[:, None] * change.source
    return room, moved.take(rows, axis=0)


def _pair_margins(
    network: Network, here: Linearised, change: Terminals, ending: Ending, caution: float
) -> list[tuple[Array, Array]]:
    """Return what the pair's currents have left, a share as its root since that is straighter, and how that changes."""
    pair, drain = network.wiring.pair, here.drain
    current = drain.id[pair]
    flow = drain.gm[pair, None] * change.gate[pair]
    flow += drain.gds[pair, None] * change.drain[pair]
    flow -= drain.gms[pair, None] * change.source[pair]
    total, whole = current[0] + current[1], flow[0] + flow[1]
    margins = []
    if ending.steered:
        share = np.maximum(current / total, 1e-9)
        root = np.sqrt(share)
        turn = (flow - share[:, None] * whole) / (2.0 * total * root)[:, None]
        margins.append((caution * (root - np.sqrt(STEERED)), turn))
    if ending.current is not None:
        margins.append(((total / ending.current - 1.0)[None], (whole / ending.current)[None]))
    return margins


def _amplitude_step(margin: Array, rise: Array, amplitude: Array, onward: float) -> Array:
    """Return the step (N,) to where the first margin that falls with the drive is predicted to vanish.

    A margin that is gone and no longer falls, such as the current of a transistor that is off, was passed: half way
    back. Where nothing falls the drive goes onward by that much [V].
    """
    steps = np.where(rise < 0.0, margin / -rise, np.where(margin < 0.0, -0.5 * amplitude, np.inf))
    nearest = steps.min(axis=0)
    return np.where(np.isfinite(nearest), nearest, onward)
