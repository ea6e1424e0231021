"""The analyses that give every measure of the catalogue, for the same simulator.

The measures of mismatch (`offset_sigma`, `offset`, `common_mode_gain_sigma`, `cmrr_mismatch`) have no analysis of their
own there: each transistor and each resistor is moved in turn, and an operating point and one point of the common-mode
response are taken. That is once for each element, where the kernel counts two parameters of a transistor; the answers
are not read. Left out in the simulator's favour are `offset_systematic`, which is zero under the conditions of the
batch, the layout's `area`, and `slew_rate`, a current over a capacitance that both stand at the operating point.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from optisize.process.card import Process
from optisize.process.law import Array
from optisize.process.parameters import TransistorParameters
from optisize.stage.analysis import Analysis
from optisize.stage.measures import CATALOGUE
from tests.benchmarks.answers import BOUNDS, Bound, Plots, Reader, at, first_zero
from tests.benchmarks.scripts import DC, OPTIONS, PER_DECADE, Script, decibels, moved
from tests.reference import spice

HIGH = "1e6"  # Hz, of the rejections that are also taken there
RANGE, PAST = 20, 0.002  # points of the input range, and how far beyond its ends the sweep goes [V]
HELD = 10  # points of the differential input to where the pair is steered
STEERED_PAST = 1.05
CURVE = 3  # points of the static curve on each side of rest
NOISE_PER_DECADE = 2
FINE = "reltol=1e-8 vntol=1e-10"  # for the distortion
OPEN, CLOSED = "1e18", "1e-3"  # ohm, of what holds the drains of the pair
LEFT_OUT = (
    "offset_sigma",
    "offset",
    "common_mode_gain_sigma",
    "cmrr_mismatch",
    "offset_systematic",
    "area",
    "slew_rate",
)
SWEPT = "v(v-sweep)"
AT_HIGH = {f"{name}_at_1mhz": name for name in ("cmrr", "supply_rejection")}


class CatalogueScript(Script):
    """Ten analyses a design. Beside those of `Script`:

    - the sweep of the common mode goes from one end of the input range to the other, `PAST` beyond each as known
      beforehand, and headroom, current and ends of the range are read between its points;
    - the frequency response also tells the phase, the input capacitance (the current of the inputs at its lowest
      frequency) and the gain at 1 MHz;
    - the responses to the common mode and to the supply have a point at DC and one at 1 MHz (three are the fewest that
      make two); the response to the ground needs no analysis, since it is what these two leave of one;
    - one point of the response to a current into the output: the output resistance;
    - noise over the default band, which takes in the frequency of the density. The flicker coefficient of the model is
      altered so that it gives at the known operating point what the process says;
    - a sweep of the differential input with held drains of the pair, to where it is steered: linear range and steering.
      What holds them is a source behind a resistor to their known voltages, which leaves a control of them where it is;
      the resistor is altered from as good as open to as good as none and back. A second copy of the stage with held
      drains would double deck and alterations;
    - each element moved by a hundredth in turn, with an operating point and a point of the response to the common mode:
      mismatch;
    - the static curve over the sine's peak to peak, `CURVE` points on each side of rest and a polynomial through them:
      the distortion. Its tolerance is finer, and it is left out where the kernel gives none.
    """

    bounds: Mapping[str, Bound] = BOUNDS

    def __init__(self, a: Analysis) -> None:
        """Take designs that the kernel has solved."""
        super().__init__(a)
        self.ends = np.append(self.ends, float(HIGH))
        low, high = a.circuit.conditions.common_mode
        supply = a.circuit.conditions.supply
        self.known = self.own()
        self.low = np.clip(self.known["input_range_low"] - PAST, -1.0, low)
        self.high = np.clip(self.known["input_range_high"] + PAST, high, supply + 1.0)
        steering = self.known["steering_voltage"]
        self.steering = np.where(np.isfinite(steering), steering, np.nanmedian(steering)) * STEERED_PAST
        self.holding = self._holding()

    def _holding(self) -> dict[str, Array]:
        """Return the nodes of the deck that are held, and the voltages that they are held at, each (N,)."""
        names = {t.drain for t in self.top.transistors if t.group == "input"}
        return {spice.node(name, 0): self.a.point.v[self.a.wiring.index[name]] for name in sorted(names)}

    @property
    def deck(self) -> list[str]:
        """The deck, with what holds the outputs and what feeds a current into them."""
        plus, minus = spice.output_terminals(self.a.circuit, 0)
        lines = [f"i_out {minus} {plus} 0 ac 0"]
        for name in self.holding:
            lines += [f"v_hold_{name} hold_{name} 0 0", f"r_hold_{name} hold_{name} {name} {OPEN}"]
        title, *rest = super().deck
        return [title, *lines, *rest]

    @property
    def kept(self) -> list[str]:
        """The vectors that the answers are read from."""
        return [*super().kept, "i(e_inp)", "i(e_inn)", "inoise_spectrum"]

    def _device(self) -> spice.Device:
        """Return the level-1 transistor of the group with flicker noise in its model."""
        grouped = super()._device()

        def flickering(t: spice.Transistor, process: Process) -> list[str]:
            return [f"{line} kf=1e-30 af=1" if line.startswith(".model") else line for line in grouped(t, process)]

        return flickering

    def alterations(self, k: int) -> list[str]:
        """Return the commands that put in the sizes and the flicker noise of design `k`."""
        commands = super().alterations(k)
        process, drain, rows = self.a.circuit.process, self.a.drain, self.a.wiring.rows
        for lead in dict.fromkeys(self.leads.values()):
            card: TransistorParameters = process.nmos if self.top.channel(lead) == "n" else process.pmos
            assert card.flicker_exponent == 1.0
            strength = drain.gm[rows[lead.name], k] ** 2 / drain.id[rows[lead.name], k]
            coefficient = card.flicker_coefficient * card.oxide_capacitance * strength
            commands.append(f"altermod model_{spice.part(lead.name, 0)} kf={coefficient:.9g}")
        return commands

    def analyses(self, k: int) -> dict[str, list[str]]:
        """Return the commands of each analysis of design `k`."""
        plus, minus = spice.output_terminals(self.a.circuit, 0)
        output = f"v({plus})" if minus == "0" else f"v({plus},{minus})"
        low, high = CATALOGUE["input_noise_total"].taken_at["band"]  # type: ignore[misc]
        two_points = f"ac lin 3 {DC} {HIGH}"
        steps = f"0 {self.steering[k] * (1.0 + 1e-6):.9g}"
        result = {
            "range": [self.conducting_first(self.low[k], self.high[k], RANGE * self.fineness)],
            "response": [f"ac dec {PER_DECADE * self.fineness} {self.frequencies}"],
            "common": [*moved("v_d", "v_cm"), two_points],
            "supply": [*moved("v_cm", "v_supply_0"), two_points],
            "resistance": [*moved("v_supply_0", "i_out"), f"ac lin 1 {DC} {DC}", *moved("i_out", "v_d")],
            "noise": [f"noise {output} v_d dec {NOISE_PER_DECADE} {low:g} {high:g}"],
            "swing": [self.swing(k)],
            "held": [*self.hold(k), f"dc v_d {steps} {self.steering[k] / HELD:.9g}", *self.release()],
            "mismatch": [*moved("v_d", "v_cm"), *self.perturbed(k), *moved("v_cm", "v_d")],
        }
        if np.isfinite(self.known["distortion"][k]):
            peak = float(CATALOGUE["distortion"].taken_at["amplitude"])  # type: ignore[arg-type]
            points = f"dc v_d {0.0 if self.top.symmetric else -peak:g} {peak * (1.0 + 1e-6):.9g} {peak / CURVE:.9g}"
            result["curve"] = [f"option {FINE}", points, f"option {OPTIONS}"]
        return result

    def perturbed(self, k: int) -> list[str]:
        """Return the commands that move each element of design `k` in turn, and back."""
        commands = []
        elements = [(f"@m_{first.name}[w]", t.width) for t, first in zip(self.parts[k], self.parts[0], strict=True)]
        elements += [(f"r_{spice.part(r.name, 0)}", self.a.circuit.sizes[r.size][k]) for r in self.top.resistors]
        for name, value in elements:
            commands += [f"alter {name}={1.01 * value:.9g}", "op", f"ac lin 1 {DC} {DC}", f"alter {name}={value:.9g}"]
        return commands

    def hold(self, k: int) -> list[str]:
        """Return the commands that hold the drains of the pair of design `k`."""
        commands = [f"alter v_hold_{name}={voltages[k]:.9g}" for name, voltages in self.holding.items()]
        return commands + [f"alter r_hold_{name}={CLOSED}" for name in self.holding]

    def release(self) -> list[str]:
        """Return the commands that let go of them."""
        return [f"alter r_hold_{name}={OPEN}" for name in self.holding]

    def write(self, name: str, k: int) -> list[str]:
        """Return the commands that keep the results of an analysis; noise has two plots, the totals last."""
        return [*(["setplot previous"] if name == "noise" else []), *super().write(name, k)]

    def own(self) -> dict[str, Array]:
        """Return what the kernel says of the measures that the answers hold, each (N,)."""
        found = {n: CATALOGUE[n].of(self.a) for n in CATALOGUE if n not in LEFT_OUT}
        at_high = {n: CATALOGUE[of].at(n, {"frequency": float(HIGH)}).of(self.a) for n, of in AT_HIGH.items()}
        return found | at_high

    def answers(self, plots: Plots, k: int) -> dict[str, float]:
        """Return the measures of design `k` as the simulator has them."""
        read = Reader(self.a, plots)
        adm = float(np.abs(read.output("response")[0]))
        low, high = (read.mean(plot)[0] for plot in ("common", "supply"))
        return {
            **self._from_range(read, plots["range"]),
            **self._from_response(read, plots["response"], adm),
            "gain": decibels(adm),
            "common_mode_gain": float(low.real),
            "cmrr": decibels(adm) - decibels(low),
            "supply_rejection": decibels(adm) - decibels(high),
            "ground_rejection": decibels(adm) - decibels(1.0 - low - high),
            **self._at_high(read),
            "output_resistance": float(read.output("resistance")[0].real),
            "input_noise": self._density(plots["noise"]),
            "input_noise_total": self._integrated(plots["noise"]),
            "output_swing": read.swing(),
            **self._held(read, plots["held"]),
            "distortion": self._third_harmonic(read) if "curve" in plots else float("nan"),
        }

    def _from_range(self, read: Reader, plot: spice.Plot) -> dict[str, float]:
        conditions = self.a.circuit.conditions
        order = np.argsort(plot[SWEPT])
        common, room = plot[SWEPT][order], read.room("range")[:, order]
        within = [np.interp(v, common, row) for row in room for v in (*conditions.common_mode, conditions.middle)]
        current = -np.interp(conditions.middle, common, plot["i(v_supply_0)"][order])
        pair = read.pair("range").sum(axis=0)[order]
        margin = np.min([*room, pair / np.interp(conditions.middle, common, pair) - 0.5], axis=0)
        middle = int(np.searchsorted(common, conditions.middle))
        upward, downward = slice(middle - 1, None), slice(middle, None, -1)
        return {
            "headroom": float(min(within)),
            "supply_current": float(current),
            "power": float(current) * conditions.supply,
            "input_range_high": at(common[upward], first_zero(margin[upward])),
            "input_range_low": at(common[downward], first_zero(margin[downward])),
        }

    def _from_response(self, read: Reader, plot: spice.Plot, adm: float) -> dict[str, float]:
        unity = read.crossing("response", adm**2 - 1.0)
        first = 2.0 * np.pi * plot["frequency"][0].real
        return {
            "bandwidth": read.crossing("response", 1.0),
            "unity_gain_frequency": unity,
            "phase": read.turned("response", unity) if np.isfinite(unity) else float("nan"),
            "input_capacitance": float(max(abs(plot[f"i(e_{n})"][0].imag) / (0.5 * first) for n in ("inp", "inn"))),
        }

    def _at_high(self, read: Reader) -> dict[str, float]:
        adm = decibels(read.magnitude("response", float(HIGH)))
        unwanted = {"cmrr_at_1mhz": "common", "supply_rejection_at_1mhz": "supply"}
        return {name: adm - decibels(read.mean(plot)[-1]) for name, plot in unwanted.items()}

    def _density(self, plot: spice.Plot) -> float:
        frequency = float(CATALOGUE["input_noise"].taken_at["frequency"])  # type: ignore[arg-type]
        density = np.interp(np.log(frequency), np.log(plot["frequency"]), np.log(plot["inoise_spectrum"]))
        return float(np.exp(density))

    def _integrated(self, plot: spice.Plot) -> float:
        """Return the noise over the band: a power law between the points.

        The simulator's own total takes the gain at the end of each step for the whole of it, and needs far more points.
        """
        log_f, log_power = np.log(plot["frequency"]), 2.0 * np.log(plot["inoise_spectrum"])
        slope = np.diff(log_power) / np.diff(log_f) + 1.0
        slope = np.where(np.abs(slope) < 1e-9, 1e-9, slope)
        ends = np.exp(log_power[:-1] + log_f[:-1]), np.exp(slope * np.diff(log_f))
        return float(np.sqrt((ends[0] * (ends[1] - 1.0) / slope).sum()))

    def _held(self, read: Reader, plot: spice.Plot) -> dict[str, float]:
        """Return linear range and steering voltage; the tangent is what the first points give."""
        departure = float(CATALOGUE["linear_range"].taken_at["departure"])  # type: ignore[arg-type]
        v, pair = plot[SWEPT][1:], read.pair("held")[:, 1:]
        slope, left = (pair[0] - pair[1]) / v, np.sqrt(pair.min(axis=0) / pair.sum(axis=0)) - 0.1
        # The slope at rest: of a polynomial through the slopes to the points beside it.
        x = v[:3] / v[2]
        tangent = np.linalg.solve(np.stack([x**0, x**2, x**4], axis=1), slope[:3])[0]
        return {
            "linear_range": _departure(v, np.abs(slope / tangent - 1.0), departure),
            "steering_voltage": abs(at(v, first_zero(left))),
        }

    def _third_harmonic(self, read: Reader) -> float:
        y = read.output("curve")
        if self.top.symmetric:  # what one side does under one drive the other does under the opposite one
            y = np.concatenate([read.output("curve", mirrored=True)[:0:-1], y])
        x = np.linspace(-1.0, 1.0, 2 * CURVE + 1)
        harmonics = np.polynomial.chebyshev.chebfit(x, y - y[CURVE], 2 * CURVE)
        return decibels(harmonics[3] / harmonics[1])


def _departure(v: Array, gone: Array, departure: float) -> float:
    """Return where a departure is reached, straight on logarithmic axes; by its square where the first is beyond."""
    beyond = np.flatnonzero(gone > departure)
    if not len(beyond):
        return float("nan")
    i = int(beyond[0])
    if i == 0:
        return float(v[0] * np.sqrt(departure / gone[0]))
    around = slice(i - 1, i + 1)
    return float(np.exp(np.interp(np.log(departure), np.log(np.maximum(gone[around], 1e-12)), np.log(v[around]))))
