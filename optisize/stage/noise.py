"""Noise of a stage, referred to its differential input: white noise of channels and resistors, flicker of channels.

White noise of a channel is that of its law's noise conductance, 4 k T g; of a resistor 4 k T / R. Flicker noise is
Kf / (Cox W L f^Af) at the gate, times gm^2.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np

from optisize.process.card import BOLTZMANN
from optisize.process.law import Array
from optisize.stage.analysis import Analysis
from optisize.stage.response import Response

FEW, FEW_PER_DECADE = 4, 0.8  # frequencies where white noise is flat
FLAT = 0.005  # by how much it may differ over the band for that (ln)
MANY, MANY_PER_DECADE = 6, 2.0  # frequencies elsewhere
FINE = 12  # points of the rule for the powers, for each frequency


def white(a: Analysis) -> Array:
    """Return the white noise current of transistors and linear branches [A^2/Hz], (T + L, N); controls have none."""

    def make() -> Array:
        resistors = a.circuit.network.conductances.copy()
        resistors[len(a.wiring.resistors) :] = 0.0
        channels = a.circuit.law.noise_conductance(*a.terminals.of_law)
        return 4.0 * BOLTZMANN * a.circuit.conditions.temperature * np.concatenate([channels, resistors])

    return a.once("white noise", make)


def flicker(a: Analysis, frequency: float) -> Array:
    """Return the flicker noise current of the transistors at a frequency [A^2/Hz], (T, N)."""
    c = a.circuit
    return c.law.flicker(c.parameters, a.drain, a.terminals.of_law, (c.width, c.units, c.length), frequency)


def _weights(r: Response) -> Array:
    """Return the power of the noise at the input over that of each source [ohm^2], (T + L, N)."""
    weights = r.branches[: len(r.a.wiring.transistors) + r.a.circuit.network.conductances.shape[0]]
    return (weights.real**2 + weights.imag**2) / np.abs(r.differential) ** 2


def input_density(r: Response) -> Array:
    """Return the power density of the noise at the input at the frequency of a response [V^2/Hz], (N,)."""
    sources = white(r.a).copy()
    sources[: len(r.a.wiring.transistors)] += flicker(r.a, r.frequency)
    return (sources * _weights(r)).sum(axis=0)


def integrated(a: Analysis, band: tuple[float, float]) -> Array:
    """Return the integral of the noise at the input over a band [V^2], (N,).

    What a source means at the input is smooth along the logarithm of the frequency, and its own power is known: the
    rule is that of the polynomial through a few frequencies, times the power. A few do where white noise is nearly the
    same over the band; more where the band goes beyond poles.
    """
    decades = np.log10(band[1] / band[0])
    total, bend = _by_rule(a, band, int(np.ceil(max(FEW, FEW_PER_DECADE * decades))))
    bent = np.flatnonzero(~(bend < FLAT))
    if len(bent):
        part = a if len(bent) == a.circuit.designs else a.take(bent)
        total[bent] = _by_rule(part, band, int(np.ceil(MANY + MANY_PER_DECADE * decades)))[0]
    return total


def _by_rule(a: Analysis, band: tuple[float, float], count: int) -> tuple[Array, Array]:
    """Return the integral by a number of frequencies [V^2], and how much white noise differs among them (ln), (N,)."""
    t = len(a.wiring.transistors)
    exponents = np.broadcast_to(a.circuit.parameters["flicker_exponent"], (t, 1))
    kinds, of_kind = np.unique(exponents[:, 0], return_inverse=True)
    frequencies, rules = _rule(band, (0.0, *(float(x) for x in kinds)), count)
    density, at_one_hertz = white(a), flicker(a, 1.0)
    total, whites = np.zeros(a.circuit.designs), []
    for k, frequency in enumerate(frequencies):
        weights = _weights(Response(a, float(frequency)))
        whites.append((density * weights).sum(axis=0))
        total += rules[0, k] * whites[-1]
        total += (rules[1 + of_kind, k, None] * at_one_hertz * weights[:t]).sum(axis=0)
    return total, np.log(np.max(whites, axis=0) / np.min(whites, axis=0))


@lru_cache(maxsize=64)
def _rule(band: tuple[float, float], exponents: tuple[float, ...], count: int) -> tuple[Array, Array]:
    """Return frequencies (F,), and weights (E, F) that integrate a smooth function times f^-exponent over a band."""
    low, high = np.log(band)
    points = np.polynomial.chebyshev.chebpts2(count)
    fine, weights = np.polynomial.legendre.leggauss(FINE * count)
    along = np.exp(0.5 * (high + low) + 0.5 * (high - low) * fine)
    vander = np.polynomial.chebyshev.chebvander
    basis = np.linalg.solve(vander(points, count - 1).T, vander(fine, count - 1).T)
    powers = np.array([along ** (1.0 - exponent) for exponent in exponents])
    return np.exp(0.5 * (high + low) + 0.5 * (high - low) * points), 0.5 * (high - low) * (powers * weights) @ basis.T
