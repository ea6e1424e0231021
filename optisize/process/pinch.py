"""The form in which tables keep the current: as the pinch-off voltage that would give it.

    I = Is W/L [F(p) - F(p - vds)],  F(v) = ln^2(1 + exp(v / 2 ut))

is the current of Enz, Krummenacher and Vittoz, Analog Integrated Circuits and Signal Processing 8, 1995, over the
source. With a fixed Is every current has one p, whatever the model behind it: p is nearly linear in the gate voltage
from weak to strong inversion, moves with the threshold, and hardly moves with vds, so that splines through it are
accurate on coarse grids and between sizes, and sane beyond their ends. There is no current without vds, exactly.

The part of it that flows to the bulk is kept as a figure of its share, nearly linear in vds beyond vdsat.
"""

from __future__ import annotations

import numpy as np

from optisize.process.law import Array

LEAST = 1e-100  # of a square over Is; what carries less is off
STEPS = 12
TOP = 160.0  # of v / 2 ut; exp stays finite in double precision, and far beyond any supply


def softplus(v: Array, ut: float) -> tuple[Array, Array]:
    """Return ln(1 + exp(v / 2 ut)) and its derivative times 2 ut."""
    grown = np.exp(np.minimum(v * (0.5 / ut), TOP))
    above = grown + 1.0
    return np.log1p(grown), grown / above


def level(p: Array, vds: Array, ut: float) -> Array:
    """Return F(p) - F(p - vds)."""
    (u, _), (r, _) = softplus(p, ut), softplus(p - vds, ut)
    return (u - r) * (u + r)


def pinch_off(q: Array, vds: Array, ut: float) -> Array:
    """Return p [V] at which F(p) - F(p - vds) is q, for vds above zero; the inverse of `level`.

    ln of the level is concave in p, so that Newton comes from below without passing the answer. It begins at the
    largest of three bounds: without inversion, in saturation, and with both ends in strong inversion.
    """
    q = np.maximum(q, LEAST)
    root = np.sqrt(q)
    weak = ut * (np.log(q) - np.log(-np.expm1(-vds / ut)))
    saturated = 2.0 * ut * np.where(root < 30.0, np.log(np.expm1(np.minimum(root, 30.0))), root)
    p = np.maximum(weak, saturated)
    wanted = np.log(q)
    for _ in range(STEPS):
        (u, s), (r, t) = softplus(p, ut), softplus(p - vds, ut)
        now = (u - r) * (u + r)
        step = (wanted - np.log(now)) * now * ut / (u * s - r * t)
        p = p + step
        if np.abs(step).max() < 1e-12:
            break
    return p


def without_cliffs(p: Array, gate: Array, axis: int) -> Array:
    """Return pinch-off voltages that fall no faster than the gate voltage along an axis.

    No channel turns off faster, since its slope factor is above one. A model without weak inversion, or a current that
    is below what a simulator computes, has a cliff there, about which a spline would ring.
    """
    rows = np.moveaxis(p.copy(), axis, 0)
    for k in range(len(gate) - 2, -1, -1):
        rows[k] = np.maximum(rows[k], rows[k + 1] - (gate[k + 1] - gate[k]))
    return np.moveaxis(rows, 0, axis)


def specific_current(vgs: Array, current: Array, ut: float) -> float:
    """Return 2 n beta ut^2 of a square, about: of a saturated transistor, from the slopes at its two ends.

    Args:
        vgs: gate voltages, (K,).
        current: of a square [A] there, (K,).
    """
    on = current > 1e-4 * current.max() * 1e-6
    slope = np.gradient(np.log(current[on]), vgs[on]).max()
    n = max(1.0 / (slope * ut), 1.0)  # a model without weak inversion has a cliff
    steepest = np.gradient(np.sqrt(current), vgs).max()
    return float((2.0 * ut * n * steepest) ** 2)


def share_figure(share: Array) -> Array:
    """Return -1 / ln of a share of the current, zero for none."""
    known = (share > 0.0) & (share < 1.0)
    return np.where(known, -1.0 / np.log(np.where(known, share, 0.5)), 0.0)


def share_of(figure: Array) -> Array:
    """Return the share of a figure, the inverse of `share_figure`."""
    known = figure > 0.0
    return np.where(known, np.exp(-1.0 / np.where(known, figure, 1.0)), 0.0)
