"""The catalogue of measures: one documented function each, all from the same solved, linearised circuit.

The text of a function is the definition that tables, pages and documentation show. A new measure is one more function
here.
"""

from __future__ import annotations

import inspect
from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np

from optisize.errors import InputError, nearest
from optisize.process.law import Array
from optisize.stage.analysis import Analysis
from optisize.stage.assembly import Topology

Sense = Literal["max", "min"]
Scale = Literal["linear", "log"]
Setting = float | tuple[float, float]


@dataclass(frozen=True)
class Parameter:
    """What a measure leaves to the designer, such as the frequency at which it is taken.

    Attributes:
        name, unit, meaning: as in files and tables; values are SI.
        default: one value, or two where a band is meant.
        low, high: the values that are allowed.
    """

    name: str
    unit: str
    meaning: str
    default: Setting
    low: float = 0.0
    high: float = np.inf


@dataclass(frozen=True)
class Measure:
    """One figure of a design.

    Attributes:
        name, unit: as in files and tables; values are SI (or dB).
        better: the direction that is usually wanted.
        scale: ``log`` where designs differ by factors rather than by differences.
        step: a difference that matters on a linear scale, in the unit; scales a limit whose bound is zero.
        signed: whether goals and limits act on the magnitude of a signed figure.
        source: where the definition or formula comes from.
        definition: what it is.
        function: from the analysis and the parameters to an array (N,).
        parameters: what the designer may set.
        settings: what has been set, by the name of the parameter; the defaults hold for the rest.
    """

    name: str
    unit: str
    better: Sense
    scale: Scale
    step: float
    signed: bool
    source: str
    definition: str
    function: Callable[..., Array]
    parameters: tuple[Parameter, ...] = ()
    settings: tuple[tuple[str, Setting], ...] = ()

    @property
    def taken_at(self) -> dict[str, Setting]:
        """The value of every parameter."""
        return {p.name: p.default for p in self.parameters} | dict(self.settings)

    def of(self, analysis: Analysis) -> Array:
        """Return the measure of N designs, (N,)."""
        return self.function(analysis, **self.taken_at)

    def at(self, name: str, settings: Mapping[str, Setting]) -> Measure:
        """Return the same measure under a name, with parameters set."""
        return replace(self, name=name, settings=tuple(settings.items()))


CATALOGUE: dict[str, Measure] = {}
FIGURES: dict[str, Measure] = {}

_PRACTICE = "common practice, no source"
_HANDBOOK = "Gray, Hurst, Lewis and Meyer, Analysis and Design of Analog Integrated Circuits, ch. 3 (from memory)"


def _entry(
    catalogue: dict[str, Measure],
    unit: str,
    better: Sense,
    *,
    scale: Scale = "log",
    step: float = 1.0,
    signed: bool = False,
    source: str = _PRACTICE,
    parameters: tuple[Parameter, ...] = (),
) -> Callable[[Callable[..., Array]], Callable[..., Array]]:
    """Enter a function into a catalogue under its own name."""

    def enter(function: Callable[..., Array]) -> Callable[..., Array]:
        text = " ".join((inspect.getdoc(function) or "").split())
        name = function.__name__
        catalogue[name] = Measure(name, unit, better, scale, step, signed, source, text, function, parameters)
        return function

    return enter


def _measure(unit: str, better: Sense, **options: object) -> Callable[..., Callable[..., Array]]:
    return _entry(CATALOGUE, unit, better, **options)  # type: ignore[arg-type]


def _figure(unit: str, better: Sense, **options: object) -> Callable[..., Callable[..., Array]]:
    return _entry(FIGURES, unit, better, **options)  # type: ignore[arg-type]


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


@_measure("dB", "max", scale="linear", step=6.0, source=_HANDBOOK)
def cmrr(a: Analysis) -> Array:
    """Systematic common-mode rejection at DC, of perfectly matched devices: gain over common_mode_gain. About
    1 + 2 gm Rss for a differential output with resistors, half of it for one output. Unlimited with an ideal tail."""
    rejected = np.abs(a.adm) / np.where(a.acm == 0.0, 1.0, np.abs(a.acm))
    return np.where(a.acm == 0.0, np.inf, decibels(rejected))


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
    excess = a.adm**2 - 1.0
    return np.where(excess > 1e-6, a.gain_crossing(excess), 0.0)


@_measure("V/s", "max")
def slew_rate(a: Analysis) -> Array:
    """Fastest change of the output under full steering: the current that steering leaves to charge the capacitance at
    the output (all of the tail current for a mirror, half of it for each side otherwise), over that capacitance."""
    tail = a.drain.id[a.wiring.pair].sum(axis=0)
    return len(a.topology.output) * a.topology.steered * tail / a.output_capacitance


@_figure("A", "min")
def id(a: Analysis) -> Array:
    """Drain current, its magnitude for either channel."""
    return a.drain.id


@_figure("V", "min", scale="linear", step=0.1)
def vgs(a: Analysis) -> Array:
    """Gate-source voltage, positive for a conducting device of either channel."""
    return a.terminals.gate - a.terminals.source


@_figure("V", "max", scale="linear", step=0.1)
def vds(a: Analysis) -> Array:
    """Drain-source voltage, positive for a conducting device of either channel."""
    return a.terminals.vds


@_figure("V", "min", scale="linear", step=0.05)
def vdsat(a: Analysis) -> Array:
    """Drain-source voltage at which saturation begins: 2 ut sqrt(if) + 4 ut for the charge law, the overdrive for the
    square law."""
    return a.saturation.vdsat


@_figure("S", "max")
def gm(a: Analysis) -> Array:
    """Gate transconductance."""
    return a.drain.gm


@_figure("S", "min")
def gds(a: Analysis) -> Array:
    """Output conductance."""
    return a.drain.gds


@_figure("", "max")
def inversion(a: Analysis) -> Array:
    """Inversion level: forward current over the specific current 2 n beta ut^2; weak below 0.1, strong above 10."""
    return a.saturation.inversion


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
