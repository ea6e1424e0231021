"""How the circuit simulator gives each measure: a table from the catalogue's name to analysis and evaluation.

A bench is a few commands that leave the figure in the vector ``result`` or in a variable. The inputs are
driven by the sources ``vd`` (differential, with an AC value of one) and ``vcm``. Every bench begins in an empty plot
and leaves the sources as it found them, so that none depends on another. A new measure is one more function here, its
docstring what the deck says of it.
"""

from __future__ import annotations

import inspect
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from optisize.problem.own_measures import origin
from optisize.simulator.netlist import HELD, Device, number, part
from optisize.simulator.site import DC, EXACT, POINTS, ROUGH, Answer, Site, at, driven, found, nearer, swept, ways
from optisize.stage.analysis import Analysis
from optisize.stage.excursion import STEERED, follow
from optisize.stage.measures import CATALOGUE, Measure
from optisize.stage.ranges import BEYOND, LEAST_CURRENT

PER_DECADE = 50
LOWEST, HIGHEST = "1m", "1t"  # Hz, of the frequency response
RANGE_POINTS = 10
LITTLE_BEYOND = 0.2  # V beyond a rail, where no end is expected; further out, ideal tails drive everything off
PATH = 20  # steps of a loop that closes, and as many of the output to where it is wanted
CURVE = 16  # points of the static curve over half a period


@dataclass(frozen=True)
class Bench:
    """How one measure is had from the simulator.

    Attributes:
        commands: from the site and the parameters of the measure.
        how: in words.
        needs: parts of the bench beside the stage: ``held``, ``curve``, ``null``, ``current``, ``noise``.
    """

    commands: Callable[..., Answer]
    how: str = ""
    needs: tuple[str, ...] = ()


BENCHES: dict[str, Bench] = {}
_MISMATCH = "a figure of mismatch, which `optisize spread` samples"
NOT_SIMULATED: dict[str, str] = {
    "cmrr_mismatch": _MISMATCH,
    "common_mode_gain_sigma": _MISMATCH,
    "offset_sigma": _MISMATCH,
    "offset": _MISMATCH,
    "area": "a figure of the layout",
    "slew_rate": "a current over a capacitance by its definition, so computed",
}


def _bench(*needs: str) -> Callable[[Callable[..., Answer]], Callable[..., Answer]]:
    """Enter a function into the table under its name."""

    def enter(function: Callable[..., Answer]) -> Callable[..., Answer]:
        BENCHES[function.__name__] = Bench(function, inspect.getdoc(function) or "", needs)
        return function

    return enter


@_bench()
def gain(s: Site) -> Answer:
    """Differential gain at DC."""
    return Answer([DC, f"let result = db({s.output})"])


@_bench()
def common_mode_gain(s: Site) -> Answer:
    """Gain from both inputs together, at DC."""
    return Answer(driven("vcm", DC, [f"let result = real({s.mean})"]))


def _rejection(s: Site, source: str, frequency: float) -> Answer:
    """Return the differential gain over the gain from another source to the mean of the outputs."""
    analysis = at(frequency)
    first = [analysis, f"let wanted = abs({s.output})", "set wanted = $&wanted"]
    last = [
        f"let unwanted = abs({s.mean})",
        "set rejection = unlimited",
        "if unwanted gt 0",
        "  let rejection = db($wanted/unwanted)",
        "  set rejection = $&rejection",
        "end",
    ]
    return Answer([*first, *driven(source, analysis, last)], "$rejection")


@_bench()
def cmrr(s: Site, frequency: float) -> Answer:
    """Differential gain over the gain from both inputs together."""
    return _rejection(s, "vcm", frequency)


@_bench()
def supply_rejection(s: Site, frequency: float) -> Answer:
    """Differential gain over the gain from the supply."""
    return _rejection(s, "vsupply", frequency)


@_bench()
def ground_rejection(s: Site, frequency: float) -> Answer:
    """Differential gain over the gain from the ground."""
    return _rejection(s, "vground", frequency)


@_bench("null")
def offset_systematic(s: Site) -> Answer:
    """Differential input at which a loop holds the output where it is wanted."""
    if np.isnan(s.a.offset[0]):  # the output cannot stand there, and the loop would find no end
        return Answer(["set offset = undefined"], "$offset")
    lines = ["op", f"alter vrest dc = {s.output}", f"dc vpath 0 2.001 {1.0 / PATH:g}"]
    return Answer([*lines, "let result = v(null)[length(v(null))-1]"])


@_bench("noise")
def input_noise(s: Site, frequency: float) -> Answer:
    """Noise density at the differential input."""
    f = number(frequency)
    return Answer([f"noise {s.noise_output} vd lin 1 {f} {f}", "let result = inoise_spectrum"])


@_bench("noise")
def input_noise_total(s: Site, band: tuple[float, float]) -> Answer:
    """Noise at the differential input over the band."""
    # The simulator's own total takes the gain at one end of each step for all of it.
    low, high = band
    points = _points_a_decade(np.log10(high / low))
    lines = [
        f"noise {s.noise_output} vd dec {points} {number(low)} {number(high)}",
        "setplot previous",
        "let total = integ(inoise_spectrum^2)",
        "let result = sqrt(vecmax(total))",
    ]
    return Answer(lines)


def _points_a_decade(decades: float, least: int = 60, most: int = 260) -> int:
    """Return how many points a decade end a sweep where a band ends, as near as can be."""
    counts = np.arange(least, most)
    lost = np.mod(counts * decades + 1e-6, 1.0) / counts
    return int(counts[np.argmax(lost < 1e-3 if (lost < 1e-3).any() else lost == lost.min())])


@_bench()
def supply_current(s: Site) -> Answer:
    """Current from the supply at rest."""
    return Answer(["op", "let result = -i(vsupply)"])


@_bench()
def power(s: Site) -> Answer:
    """Supply voltage times that current."""
    return Answer(["op", f"let result = -i(vsupply)*{number(s.a.circuit.conditions.supply)}"])


@_bench()
def headroom(s: Site) -> Answer:
    """Least vds - vdsat over the common-mode range."""
    conditions = s.a.circuit.conditions
    lines = ["set room = 1e99"]
    for end in dict.fromkeys(conditions.common_mode):
        step = (end - conditions.middle) / RANGE_POINTS
        sweep = f"dc vcm {number(conditions.middle)} {number(end + 1e-3 * step)} {number(step)}" if step else "op"
        lines.append(sweep)
        for expression in s.room().values():
            lines += [f"let room = vecmin({expression})", "if room lt $room", "  set room = $&room", "end"]
    return Answer(lines, "$room")


def _input_range(s: Site, side: float, measure: str) -> Answer:
    conditions = s.a.circuit.conditions
    rail, middle = (conditions.supply if side > 0.0 else 0.0), conditions.middle
    expected = float(CATALOGUE[measure].of(s.a)[0]) - middle
    most = abs(rail - middle) + (BEYOND if np.isfinite(expected) else LITTLE_BEYOND)
    half = ["op", *s.pair(), f"let half = {LEAST_CURRENT}*(positive+negative)", "set half = $&half"]
    margins = {**s.room(), "current": "(positive+negative)/($half)-1"}
    reach = swept("vcm", middle, ways(expected, side, most), margins, f"abs(v(cm)-{number(middle)})", s.pair())
    end = f"{number(middle)}{'+' if side > 0.0 else '-'}$reading"
    words = [
        "if $reading lt 1e98",
        f"  let reading = {end}",
        "  set reading = $&reading",
        "else",
        f"  set reading = {'unlimited' if side > 0.0 else '-unlimited'}",
        "end",
    ]
    return Answer([f"option {ROUGH}", *half, *reach, f"option {EXACT}", *words], "$reading")


@_bench()
def input_range_low(s: Site) -> Answer:
    """Common mode at which saturation or half of the pair's current is lost, downwards."""
    return _input_range(s, -1.0, "input_range_low")


@_bench()
def input_range_high(s: Site) -> Answer:
    """Common mode at which saturation or half of the pair's current is lost, upwards."""
    return _input_range(s, 1.0, "input_range_high")


@_bench()
def output_swing(s: Site) -> Answer:
    """Twice the way of the output to where saturation is lost or the pair is steered, the shorter one."""
    a = s.a
    margins = {**s.room(), **_STEERED}

    def sweep(sign: float) -> list[str]:
        end = follow(a.circuit.network, a.point.v, None, a.drives[:, 0], np.array([sign]))
        expected = float(end.amplitude[0]) if end.found[0] else np.nan
        return swept("vd", 0.0, ways(expected, sign), margins, f"2*abs({s.output}-($rest))", s.pair())

    return nearer(sweep, ["op", f"let rest = {s.output}", "set rest = $&rest"])


# What each input transistor has left of the pair's current, as roots since these are straighter.
_STEERED = {f"{x}_left": f"sqrt({x}/(positive+negative))-{STEERED**0.5:g}" for x in ("positive", "negative")}


def _holding(s: Site) -> list[str]:
    """Return the commands that put what is held to where it is at rest."""
    return ["op", *(f"alter v{held.replace('.', '_')} dc = v({node})" for node, held in s.held().items())]


@_bench("held")
def linear_range(s: Site, departure: float) -> Answer:
    """Differential input at which the difference of the pair's currents departs from its tangent, drains held."""
    expected = float(CATALOGUE["linear_range"].function(s.a, departure)[0])
    reach, source = ways(expected, 1.0), f"v{HELD}_d"
    near = reach[0] / POINTS
    tangent = [
        f"dc {source} {number(-near)} {number(1.001 * near)} {number(near)}",
        *s.pair(HELD),
        "let difference = positive-negative",
        f"let slope = (difference[2]-difference[0])/{number(2.0 * near)}",
        "let rest = difference[1]",
        "set slope = $&slope",
        "set rest = $&rest",
    ]
    inside = {"inside": f"{number(departure)}-abs((positive-negative-($rest))/(($slope)*v({HELD}_d))-1)"}
    sweep = swept(source, near, reach, inside, f"abs(v({HELD}_d))", s.pair(HELD))
    return found([*_holding(s), *tangent, *sweep])


@_bench("held")
def steering_voltage(s: Site) -> Answer:
    """Differential input that leaves one input transistor with 1 % of the pair's current, drains held."""
    expected = float(CATALOGUE["steering_voltage"].of(s.a)[0])
    sweep = swept(f"v{HELD}_d", 0.0, ways(expected, 1.0), _STEERED, f"abs(v({HELD}_d))", s.pair(HELD))
    return found([*_holding(s), *sweep])


@_bench("curve")
def distortion(s: Site, amplitude: float) -> Answer:
    """Third harmonic over the fundamental, of the static curve over half a period of the sine."""
    supply = number(s.a.circuit.conditions.supply)
    lines = [
        DC,
        f"let asked = {number(amplitude)}*abs({s.output})",
        "set harmonic = undefined",
        f"if asked lt {supply}",
        "  option reltol=1e-9 vntol=1e-11",
        f"  alter vamplitude dc = {number(amplitude)}",
        f"  dc vstep 0 {CURVE}.001 1",
        "  alter vamplitude dc = 0",
        f"  option {EXACT}",
        f"  let angle = pi*v(step)/{CURVE}",
        f"  let curve = ({s.output})*(1-((v(step) lt 0.5)+(v(step) gt {CURVE}-0.5))/2)",
        "  let harmonic = db(abs(mean(curve*cos(3*angle))/mean(curve*cos(angle))))",
        "  set harmonic = $&harmonic",
        "end",
    ]
    return Answer(lines, "$harmonic")


def _crossing(s: Site, level: str) -> list[str]:
    """Return the commands that set ``crossing`` to where the gain has fallen to a level, else to ``undefined``."""
    return [
        f"ac dec {PER_DECADE} {LOWEST} {HIGHEST}",
        f"let gain = abs({s.output})",
        f"let level = {level}",
        "set crossing = undefined",
        "if vecmin(gain) lt level and gain[0] gt level",
        "  meas ac falls when gain=level fall=1",
        "  set crossing = $&falls",
        "end",
    ]


@_bench()
def bandwidth(s: Site) -> Answer:
    """Frequency at which the gain has fallen by 3 dB."""
    return Answer(_crossing(s, "gain[0]/sqrt(2)"), "$crossing")


@_bench()
def unity_gain_frequency(s: Site) -> Answer:
    """Frequency at which the gain has fallen to one."""
    return Answer([*_crossing(s, "1"), "if gain[0] le 1", "  set crossing = 0", "end"], "$crossing")


@_bench()
def phase(s: Site) -> Answer:
    """Phase of the gain there, against DC."""
    lines = [
        *_crossing(s, "1"),
        f"let rest = real(({s.output})[0])",
        "set rest = $&rest",
        "set turned = undefined",
        "if vecmin(gain) lt level and gain[0] gt level",
        "  ac lin 1 $crossing $crossing",
        f"  let turned = ph(({s.output})/($rest))*180/pi",
        "  if turned gt 90",
        "    let turned = turned-360",
        "  end",
        "  set turned = $&turned",
        "end",
    ]
    return Answer(lines, "$turned")


@_bench("current")
def output_resistance(s: Site) -> Answer:
    """Voltage at the output under a current of one ampere into it, small signal."""
    return Answer(driven("iout", DC, [f"let result = real({s.output})"]))


@_bench()
def input_capacitance(s: Site, frequency: float) -> Answer:
    """Charge of an input over its voltage under the differential drive, of the heavier one."""
    # The source of each input has half of the drive; its current runs into its first node.
    f = frequency or 1.0
    charge = f"/(2*pi*{number(f)}*0.5)"
    lines = [
        at(f),
        f"let result = -imag(i(einp)){charge}",
        f"let other = imag(i(einn)){charge}",
        "if other gt result",
        "  let result = other",
        "end",
    ]
    return Answer(lines)


def no_bench(measure: Measure, a: Analysis) -> str:
    """Return why a measure of a stage is not simulated; empty where it is."""
    name = origin(measure)
    if name == "offset_systematic":
        single = len(a.topology.output) == 1 and a.circuit.conditions.output_common_mode is not None
        return "" if single else "zero by its definition, of this output"
    if name in BENCHES or name.rpartition(".")[2] in FIGURES:
        return ""
    return NOT_SIMULATED.get(name, "has no bench")


# Of one transistor: from the site and the transistor to an expression.
FIGURES: dict[str, Callable[[Site, Device], str]] = {
    "id": lambda s, d: s.devices.figure(d, "id"),
    "vdsat": lambda s, d: s.devices.figure(d, "vdsat"),
    "vds": lambda s, d: s.across(d),
    "vgs": lambda s, d: s.control(d),
}


def bench_of(measure: Measure) -> Bench:
    """Return the bench of a measure that has one."""
    name = origin(measure)
    if name in BENCHES:
        return BENCHES[name]
    transistor, _, figure = name.rpartition(".")

    def commands(s: Site) -> Answer:
        device = next(d for d in s.transistors if d.name == part(transistor))
        return Answer(["op", f"let result = {FIGURES[figure](s, device)}"])

    return Bench(commands, "Of the transistor at rest.")
