"""Noise of a stage, referred to its differential input: white noise of channels and resistors, flicker of channels.

White noise of a channel is that of its law's noise conductance, 4 k T g; of a resistor 4 k T / R. Flicker noise is
Kf / (Cox W L f^Af) at the gate, times gm^2.
"""

from __future__ import annotations

import numpy as np

from optisize.process.card import BOLTZMANN
from optisize.process.law import Array
from optisize.stage.analysis import Analysis
from optisize.stage.response import Response

POINTS_PER_DECADE = 2.0  # of the Gauss-Legendre rule over the logarithm of the frequency
LEAST_POINTS = 5


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
    p, c = a.circuit.parameters, a.circuit
    gate = p["oxide_capacitance"] * c.width * c.units * c.length * frequency ** p["flicker_exponent"]
    return p["flicker_coefficient"] * a.drain.gm**2 / gate


def input_density(r: Response) -> Array:
    """Return the power density of the noise at the input at the frequency of a response [V^2/Hz], (N,)."""
    a = r.a
    sources = white(a).copy()
    sources[: len(a.wiring.transistors)] += flicker(a, r.frequency)
    weights = r.branches[: len(sources)]
    output = (sources * (weights.real**2 + weights.imag**2)).sum(axis=0)
    return output / np.abs(r.differential) ** 2


def integrated(a: Analysis, band: tuple[float, float]) -> Array:
    """Return the integral of the noise at the input over a band [V^2], (N,).

    A Gauss-Legendre rule over the logarithm of the frequency, along which white and flicker noise and the poles of a
    stage are smooth.
    """
    low, high = np.log(band)
    points = int(np.ceil(LEAST_POINTS + POINTS_PER_DECADE * (high - low) / np.log(10.0)))
    nodes, weights = np.polynomial.legendre.leggauss(points)
    total = np.zeros(a.circuit.designs)
    for node, weight in zip(nodes, weights, strict=True):
        frequency = float(np.exp(0.5 * (high + low) + 0.5 * (high - low) * node))
        total += 0.5 * (high - low) * weight * frequency * input_density(Response(a, frequency))
    return total
