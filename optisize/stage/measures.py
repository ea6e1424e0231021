"""The catalogue of measures: one documented function each, all from the same solved, linearised circuit.

The text of a function is the definition that tables, pages and documentation show. A new measure is one more function
here.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping

import numpy as np

from optisize.errors import InputError, nearest
from optisize.process.law import Array
from optisize.stage import mismatch, noise, ranges
from optisize.stage.analysis import Analysis
from optisize.stage.assembly import Topology
from optisize.stage.catalogue import Measure as Measure
from optisize.stage.catalogue import Parameter as Parameter
from optisize.stage.catalogue import Sense as Sense
from optisize.stage.catalogue import Setting as Setting
from optisize.stage.catalogue import entry
from optisize.stage.figures import FIGURES as FIGURES
from optisize.stage.response import response

CATALOGUE: dict[str, Measure] = {}

_HANDBOOK = "Gray, Hurst, Lewis and Meyer, Analysis and Design of Analog Integrated Circuits, ch. 3 (from memory)"


_NOISE = "Gray, Hurst, Lewis and Meyer, Analysis and Design of Analog Integrated Circuits, ch. 11 (from memory)"
_MATCHING = "Pelgrom, Duinmaijer and Welbers, IEEE JSSC 24, 1989 (from memory)"

_FROM_DC = Parameter("frequency", "Hz", "where it is taken; 0 for DC", 0.0, 0.0, 1e13)
_FREQUENCY = Parameter("frequency", "Hz", "where it is taken", 1e3, 1e-6, 1e13)
_BAND = Parameter("band", "Hz", "lowest and highest frequency", (1.0, 1e5), 1e-6, 1e13)
_SIGMAS = Parameter("sigmas", "", "standard deviations of mismatch that are counted", 3.0, 0.0, 10.0)
_DEPARTURE = Parameter("departure", "", "departure from the tangent, relative", 0.01, 1e-4, 0.5)
_AMPLITUDE = Parameter("amplitude", "V", "peak of the differential sine at the input", 1e-3, 1e-6, 10.0)


def _measure(unit: str, better: Sense, **options: object) -> Callable[..., Callable[..., Array]]:
    return entry(CATALOGUE, unit, better, **options)  # type: ignore[arg-type]


def decibels(ratio: Array) -> Array:
    """Return 20 log10 of a magnitude; unlimited for infinity."""
    with np.errstate(divide="ignore"):
        return 20.0 * np.log10(np.abs(ratio))


@_measure("dB", "max", scale="linear", step=6.0, source=_HANDBOOK)
def gain(a: Analysis) -> Array:
    """Small-signal differential gain at DC: change of the output over the full differential input voltage. A
    single-ended output of a resistor load shows half of the half-circuit gain."""
    return decibels(a.adm)


@_measure("V/V", "min", scale="linear", step=0.1, signed=True, source=_HANDBOOK)
def common_mode_gain(a: Analysis) -> Array:
    """Small-signal gain at DC from both inputs together to the output, with its sign; of a differential output to the
    mean of its two sides. Goals and limits act on its magnitude."""
    return a.acm


def _over(wanted: Array, unwanted: Array) -> Array:
    """Return the ratio of two gains in decibels, unlimited where the unwanted one is zero."""
    ratio = np.abs(wanted) / np.where(unwanted == 0.0, 1.0, np.abs(unwanted))
    return np.where(unwanted == 0.0, np.inf, decibels(ratio))


@_measure("dB", "max", scale="linear", step=6.0, source=_HANDBOOK, parameters=(_FROM_DC,))
def cmrr(a: Analysis, frequency: float = 0.0) -> Array:
    """Systematic common-mode rejection, of perfectly matched devices: differential gain over common-mode gain. About
    1 + 2 gm Rss for a differential output with resistors, half of it for one output. Unlimited at DC with an ideal tail
    or under common-mode control; above DC the capacitance of the tail node counts."""
    if frequency == 0.0:
        return _over(a.adm, a.acm)
    r = response(a, frequency)
    return _over(r.differential, a.beyond_rounding(r.mean_gain("common")))


@_measure("dB", "max", scale="linear", step=6.0, source=_MATCHING, parameters=(_SIGMAS,))
def cmrr_mismatch(a: Analysis, sigmas: float = 3.0) -> Array:
    """Common-mode rejection at DC with mismatch: gain over the common-mode gain to the output that a number of
    standard deviations of mismatch adds to the systematic one. Where a sizing makes the systematic one cancel, this
    does not reward it. Of a differential output: from the common mode to the difference of its sides."""
    systematic = np.abs(a.acm) if len(a.topology.output) == 1 else np.abs(a.common_to_difference)
    return _over(a.adm, systematic + sigmas * mismatch.common_gain_sigma(a))


@_measure("V/V", "min", scale="log", source=_MATCHING)
def common_mode_gain_sigma(a: Analysis) -> Array:
    """Standard deviation, by mismatch and to first order, of the gain from the common mode to the output at DC (of a
    differential output: to the difference of its sides), with the offset taken out by the input."""
    return mismatch.common_gain_sigma(a)


@_measure("dB", "max", scale="linear", step=6.0, source=_HANDBOOK, parameters=(_FROM_DC,))
def supply_rejection(a: Analysis, frequency: float = 0.0) -> Array:
    """Systematic rejection of the positive rail: differential gain over the gain from the supply to the output, the
    inputs and the ground at rest; of a differential output to the mean of its two sides."""
    return _rail_rejection(a, "supply", frequency)


@_measure("dB", "max", scale="linear", step=6.0, source=_HANDBOOK, parameters=(_FROM_DC,))
def ground_rejection(a: Analysis, frequency: float = 0.0) -> Array:
    """Systematic rejection of the ground rail: differential gain over the gain from the ground to the output, the
    inputs and the supply at rest; of a differential output to the mean of its two sides."""
    return _rail_rejection(a, "ground", frequency)


def _rail_rejection(a: Analysis, rail: str, frequency: float) -> Array:
    r = response(a, frequency)
    return _over(r.differential, a.beyond_rounding(r.mean_gain(rail)))


@_measure("V", "min", scale="linear", step=1e-3, signed=True)
def offset_systematic(a: Analysis) -> Array:
    """Differential input voltage that brings a single-ended output to conditions.output_common_mode; zero for a
    matched stage without that condition, or with a differential output. Goals and limits act on its magnitude."""
    return a.offset


@_measure("V", "min", source=_MATCHING)
def offset_sigma(a: Analysis) -> Array:
    """Standard deviation of the input-referred offset by mismatch of thresholds, current factors and resistances, to
    first order."""
    return mismatch.offset_sigma(a)


@_measure("V", "min", source=_MATCHING, parameters=(_SIGMAS,))
def offset(a: Analysis, sigmas: float = 3.0) -> Array:
    """Input-referred offset: the magnitude of the systematic one and a number of standard deviations of mismatch."""
    return np.abs(a.offset) + sigmas * mismatch.offset_sigma(a)


@_measure("V/Hz^0.5", "min", source=_NOISE, parameters=(_FREQUENCY,))
def input_noise(a: Analysis, frequency: float = 1e3) -> Array:
    """Noise density at a frequency, referred to the differential input: thermal and flicker noise of all transistors,
    thermal noise of all resistors. The bias currents themselves are taken as noiseless."""
    return np.sqrt(noise.input_density(response(a, frequency)))


@_measure("V", "min", source=_NOISE, parameters=(_BAND,))
def input_noise_total(a: Analysis, band: tuple[float, float] = (1.0, 1e5)) -> Array:
    """Effective value of the noise referred to the differential input, integrated over a band."""
    return np.sqrt(noise.integrated(a, band))


@_measure("A", "min")
def supply_current(a: Analysis) -> Array:
    """All current from the supply, with the bias branch."""
    currents = a.circuit.network.branch_currents(a.terminals, a.drain)
    return a.wiring.current_stamp[a.wiring.index["supply"]] @ currents


@_measure("W", "min")
def power(a: Analysis) -> Array:
    """Supply voltage times supply current."""
    return a.circuit.conditions.supply * supply_current(a)


@_measure("V", "max", scale="linear", step=0.05)
def headroom(a: Analysis) -> Array:
    """Smallest vds - vdsat of all transistors that must be saturated, worst over the whole common-mode range;
    diode-connected ones are saturated by themselves and do not count."""
    return a.room


@_measure("V", "min", scale="linear", step=0.05)
def input_range_low(a: Analysis) -> Array:
    """Lowest common-mode input voltage at which everything that must be saturated is, and the pair carries at least
    half of its current in the middle of the range. Where nothing ends the range within a volt of the rails, -unlimited.
    """
    return ranges.input_range(a)[0]


@_measure("V", "max", scale="linear", step=0.05)
def input_range_high(a: Analysis) -> Array:
    """Highest common-mode input voltage at which everything that must be saturated is, and the pair carries at least
    half of its current in the middle of the range. Where nothing ends the range within a volt of the rails, unlimited.
    """
    return ranges.input_range(a)[1]


@_measure("V", "max", scale="log", source=_HANDBOOK, parameters=(_DEPARTURE,))
def linear_range(a: Analysis, departure: float = 0.01) -> Array:
    """Differential input voltage, either way, at which the difference of the input transistors' currents departs from
    its tangent by 1 %, or by another departure that is stated, their drains held at rest."""
    return ranges.linear_range(a, departure)


@_measure("V", "max", scale="log", source=_HANDBOOK)
def steering_voltage(a: Analysis) -> Array:
    """Differential input voltage that steers the pair: one input transistor is left with 1 % of its current, the drains
    of the pair held at rest."""
    return ranges.steering_voltage(a)


@_measure("dB", "min", scale="linear", step=6.0, parameters=(_AMPLITUDE,))
def distortion(a: Analysis, amplitude: float = 1e-3) -> Array:
    """Third harmonic of the output over its fundamental, for a slow differential sine of a stated peak at the input.
    Undefined where the sine asks for more than the supply at the output."""
    return decibels(ranges.third_harmonic(a, amplitude))


@_measure("V", "max", scale="linear", step=0.1)
def output_swing(a: Analysis) -> Array:
    """Largest symmetrical excursion of the output about its rest, peak to peak, while the input is driven
    differentially: up to where the first transistor leaves saturation or an input transistor carries less than 1 % of
    the pair's current, whichever side comes first."""
    down, up = a.output_excursions
    return 2.0 * np.minimum(down, up)


@_measure("m^2", "min")
def area(a: Analysis) -> Array:
    """Layout estimate: fingers with shared diffusions on the process grid, resistors at their matched width, units of
    the mirror drawn alike, times the process's spacing factor. Not a layout."""
    devices = a.circuit.drawn.area.sum(axis=0) + a.circuit.resistor_areas.sum(axis=0)
    return devices * a.circuit.process.grid.spacing_factor


@_measure("Hz", "max")
def bandwidth(a: Analysis) -> Array:
    """Frequency at which the differential gain has fallen by 3 dB, from ideal input sources into the load
    capacitance."""
    return a.gain_crossing(np.ones(a.circuit.designs))


@_measure("Hz", "max")
def unity_gain_frequency(a: Analysis) -> Array:
    """Frequency at which the magnitude of the differential gain has fallen to one; zero where the gain at DC is no
    more than one."""
    return a.unity_crossing


@_measure("deg", "max", scale="linear", step=15.0)
def phase(a: Analysis) -> Array:
    """Phase of the differential gain at the unity-gain frequency against that at DC; a lag is negative. Undefined where
    the gain at DC is no more than one."""
    return a.unity_phase


@_measure("ohm", "min")
def output_resistance(a: Analysis) -> Array:
    """Resistance at DC into the output, the inputs at rest; of a differential output between its two sides."""
    r = response(a, 0.0)
    return a.wiring.output_weights @ r.adjoint[:, 0]


@_measure("F", "min", parameters=(_FROM_DC,))
def input_capacitance(a: Analysis, frequency: float = 0.0) -> Array:
    """Capacitance that a source at one input sees under a differential drive, of the heavier input: gate capacitances
    with what the gain to the drains makes of them, at low frequency unless one is stated."""
    return response(a, frequency).input_capacitance.max(axis=0)


@_measure("V/s", "max")
def slew_rate(a: Analysis) -> Array:
    """Fastest change of the output under full steering: the current that steering leaves to charge the capacitance at
    the output (all of the tail current for a mirror, half of it for each side otherwise), over that capacitance."""
    tail = a.drain.id[a.wiring.pair].sum(axis=0)
    return len(a.topology.output) * a.topology.steered * tail / a.output_capacitance


def find(name: str, topology: Topology, own: Mapping[str, Measure] | None = None) -> Measure:
    """Return a measure by name; ``input.p.gm`` is the figure of one transistor.

    Args:
        name: as in files and tables.
        topology: the stage.
        own: measures by name that come before those of the catalogue.

    Raises InputError for a name that the stage does not have.
    """
    if own and name in own:
        return own[name]
    if name in CATALOGUE:
        return CATALOGUE[name]
    transistor, _, figure = name.rpartition(".")
    names = [x.name for x in topology.transistors]
    if figure in FIGURES and transistor in names:
        entry, row = FIGURES[figure], names.index(transistor)
        return Measure(
            **{**entry.__dict__, "name": name, "function": lambda a: entry.function(a)[row]},
        )
    allowed = [*(own or ()), *CATALOGUE, *(f"{t}.{f}" for t in names for f in FIGURES)]
    raise InputError(f'"{name}" is not a measure; "optisize measures" lists them{nearest(name, allowed)}')
