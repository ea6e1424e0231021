"""How a deck writes the transistors of each law: one class a law, and their register.

`square` has level-1 cards, `charge` a behavioural subcircuit of its equations, `table` the designer's own library. The
parameters of the first two are those at the temperature and corner of the problem, and the simulator's two temperatures
are the same, so that nothing is shifted twice.
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from pathlib import Path
from typing import Protocol

from optisize.errors import InputError, shorten
from optisize.process.card import thermal_voltage
from optisize.simulator.netlist import STAGE, Device, number, wrapped
from optisize.stage.circuit import Circuit

OXIDE_PERMITTIVITY = 3.9 * 8.854214871e-12  # F/m, the constant with which the level-1 model reads TOX
NO_LEAK = 1e-60  # A, of junctions


class Devices(Protocol):
    """The transistors of one law in a deck."""

    def __init__(self, circuit: Circuit, noisy: bool) -> None:
        """Take the sized stage; `noisy` tells whether a bench asks for noise."""

    def notes(self) -> list[str]:
        """Return what a reader has to know of these transistors, each one line."""

    def options(self, celsius: float) -> str:
        """Return the temperature [degC] as the simulator's options say it."""

    def cards(self, devices: Sequence[Device]) -> list[str]:
        """Return models and subcircuits, which stand before the stage."""

    def lines(self, device: Device) -> list[str]:
        """Return the lines of one transistor."""

    def twins(self, device: Device) -> dict[str, str]:
        """Return nodes that a transistor adds to the subcircuit, with the nodes of it at whose voltage they are."""

    def figure(self, device: Device, figure: str, stage: str = STAGE) -> str:
        """Return the simulator's expression of ``id`` or ``vdsat``, positive for either channel.

        Args:
            device: the transistor.
            figure: which of the two.
            stage: the instance of the stage in the bench.
        """

    def saved(self, device: Device, stage: str = STAGE) -> list[str]:
        """Return what has to be saved for these expressions."""


def _shape(device: Device, multiple: str) -> str:
    """Return the drawn shape of a transistor, of one unit and how many."""
    given = {"w": device.width, "l": device.length}
    given |= {"ad": device.drain_area, "as": device.source_area}
    given |= {"pd": device.drain_edge, "ps": device.source_edge}
    text = " ".join(f"{key}={number(value)}" for key, value in given.items())
    return f"{text} {multiple}={device.units}" if device.units > 1 else text


class _OfProcess:
    """What the laws with parameters of a process file have in common."""

    def __init__(self, circuit: Circuit, noisy: bool) -> None:
        self._circuit, self._noisy = circuit, noisy

    def options(self, celsius: float) -> str:
        """Return both of the simulator's temperatures: the parameters are those at the temperature of the problem."""
        return f"temp={number(celsius)} tnom={number(celsius)}"

    def twins(self, device: Device) -> dict[str, str]:
        """Return no nodes."""
        return {}

    def _parameter(self, device: Device, name: str) -> float:
        """Return a parameter of a transistor at temperature and corner."""
        return float(self._circuit.parameters[name][device.row, 0])


def first_of_each(devices: Sequence[Device], key: str) -> list[Device]:
    """Return the first device of each group or channel."""
    return list({getattr(d, key): d for d in reversed(devices)}.values())[::-1]


class SquareDevices(_OfProcess):
    """Level-1 transistors, one card for each group since lambda follows the length; their junctions do not leak.

    The level-1 model has no flicker noise with a gate voltage and an exponent of its own, so a noise voltage stands in
    series with the gate where a bench asks for noise: that of a resistor without bias, a millionth of it, which leaves
    1.7e-29 V^2/Hz of the resistor's own noise.
    """

    def notes(self) -> list[str]:
        """Return what a reader has to know of these transistors."""
        told = ["transistors: level 1, junctions without leakage, one card for each group (lambda follows the length)"]
        if self._noisy:
            told.append("flicker noise: a noise voltage in series with each gate, since level 1 has no such noise")
        return told

    def _flicker(self, device: Device) -> bool:
        return self._noisy and self._parameter(device, "flicker_coefficient") > 0.0

    def cards(self, devices: Sequence[Device]) -> list[str]:
        """Return a card for each group, and the source of flicker noise for each channel."""
        lines = []
        for d in first_of_each(devices, "group"):
            lines += wrapped(self._card(d))
        for d in first_of_each(devices, "channel"):
            lines += self._flicker_source(d) if self._flicker(d) else []
        return lines

    def _card(self, device: Device) -> str:
        def p(name: str) -> float:
            return self._parameter(device, name)

        values = {
            "level": 1.0,
            "vto": p("threshold") if device.channel == "n" else -p("threshold"),
            "kp": p("current_factor"),
            "gamma": p("body_effect"),
            "phi": p("surface_potential"),
            "lambda": p("channel_modulation") / device.length,
            "tox": OXIDE_PERMITTIVITY / p("oxide_capacitance"),
            "cgso": p("overlap_capacitance"),
            "cgdo": p("overlap_capacitance"),
            "cj": p("junction_capacitance"),
            "cjsw": p("sidewall_capacitance"),
            "mj": p("junction_grading"),
            "mjsw": p("sidewall_grading"),
            "pb": p("junction_potential"),
            "is": NO_LEAK,
        }
        model = " ".join(f"{key}={number(value)}" for key, value in values.items())
        return f".model {_model(device)} {device.channel}mos {model}"

    def _flicker_source(self, device: Device) -> list[str]:
        strength = self._parameter(device, "flicker_coefficient") / self._parameter(device, "oxide_capacitance")
        exponent = number(self._parameter(device, "flicker_exponent"))
        return [
            f"* flicker noise of a gate: K over area and f^{exponent}",
            f".subckt flicker_{device.channel} gate in area=1p",
            "Enoise gate in drop 0 1u",
            "Rnoise drop 0 1k flicker",
            f".model flicker r kf={{{number(strength)}*1e6/area}} af=0 ef={exponent}",
            ".ends",
        ]

    def lines(self, device: Device) -> list[str]:
        """Return a transistor, and the noise at its gate."""
        ends, lines = device.ends, []
        if self._flicker(device):
            gate = f"gate_{device.name}"
            ends = f"{device.drain} {gate} {device.source} {device.bulk}"
            area = number(device.width * device.length * device.units)
            lines = [f"Xflicker_{device.name} {gate} {device.gate} flicker_{device.channel} area={area}"]
        return [*wrapped(f"M{device.name} {ends} {_model(device)} {_shape(device, 'm')}"), *lines]

    def twins(self, device: Device) -> dict[str, str]:
        """Return the gate behind the noise."""
        return {f"gate_{device.name}": device.gate} if self._flicker(device) else {}

    def figure(self, device: Device, figure: str, stage: str = STAGE) -> str:
        """Return the simulator's own figure."""
        return f"abs(@m.x{stage}.m{device.name}[{figure}])"

    def saved(self, device: Device, stage: str = STAGE) -> list[str]:
        """Return the figures that are read."""
        return [f"@m.x{stage}.m{device.name}[{figure}]" for figure in ("id", "vdsat")]


def _model(device: Device) -> str:
    return f"{device.group}_{device.channel}mos"


# Terminal voltages from the bulk, turned for a p-channel transistor whose current runs from source to drain. The limits
# in exp and sqrt only keep the simulator's iterations away from what has no value.
_CHARGE = """\
* the charge law, {c}-channel: shape of one unit, and how many of them
.subckt charge_{c} d g s b w=1u l=1u units=1 ad=0 as=0 pd=0 ps=0
{parameters}
.param r0={{sqrt(phi)+gamma/2}} strength={{2*kp*w*units/l*ut*ut}} delta={{4*ut}} lateral={{2*ut/(critical*l)}}
* pinch-off voltage, slope factor, and ln(1 + exp(v / 2 ut)) of both ends of the channel
Broot root 0 v=sqrt(max({vg}-vt0+(r0*r0),(max(0.75*gamma,0.01)^2)))
Bvp vp 0 v={vg}-vt0-gamma*(v(root)-r0)
Bslope slope 0 v=1/(1-(gamma/2)/v(root))
Bforward forward 0 v=ln(1+exp(min((v(vp)-{vs})/(2*ut),300)))
Breverse reverse 0 v=ln(1+exp(min((v(vp)-{vd})/(2*ut),300)))
* channel-length modulation, vertical field, velocity saturation
Blength length 0 v=1+(sqrt(({vd}-{vs})^2+(delta*delta))-delta)/(early*l)
Bfield field 0 v=1+(theta/2)*(v(vp)+sqrt(v(vp)^2+(delta*delta)))
Bdrag drag 0 v=sqrt(1+(lateral*(v(forward)-v(reverse)))^2)
Bchannel {ends} i={current}{white}
Bvdsat vdsat 0 v=(2*ut)*v(forward)+(4*ut)
* gate capacitances by the charges of both ends, and junctions without leakage
Bxf xf 0 v=sqrt(0.25+v(forward)^2)
Bxr xr 0 v=sqrt(0.25+v(reverse)^2)
Bcs cs 0 v=2/3*(1-(v(xr)^2+v(xr)+v(xf)/2)/(v(xf)+v(xr))^2)
Bcd cd 0 v=2/3*(1-(v(xf)^2+v(xf)+v(xr)/2)/(v(xf)+v(xr))^2)
Cgs g s c='(oxide*w*l*units)*v(cs)+(overlap*w*units)'
Cgd g d c='(oxide*w*l*units)*v(cd)+(overlap*w*units)'
Cgb g b c='(oxide*w*l*units)*(1-1/v(slope))*(1-v(cs)-v(cd))'
Ddrain {junction_d} junction area={{ad*units}} pj={{pd*units}}
Dsource {junction_s} junction area={{as*units}} pj={{ps*units}}
.model junction d {junction}
{noise}.ends"""
_CHARGE_CURRENT = "strength*v(slope)*v(length)/(v(field)*v(drag))*(v(forward)^2-v(reverse)^2)"

# The noise of one ohm times the root of the conductance Gamma gms; at the gate, flicker noise of an unbiased resistor.
_CHARGE_NOISE = """\
* noise: white 4 k T Gamma gms in the channel, and K over area and f^{exponent} at its gate
Bqf qf 0 v=max(v(forward)^2/(v(xf)+0.5),1e-30)
Bqr qr 0 v=v(reverse)^2/(v(xr)+0.5)
Bshare share 0 v=(4*(v(qf)^2+v(qf)*v(qr)+v(qr)^2)+3*(v(qf)+v(qr)))/(6*v(qf)*(v(qf)+v(qr)+1))
Bpull pull 0 v=(lateral^2)*(v(forward)-v(reverse))/v(drag)^2
Bend end 0 v=(strength/ut)*v(slope)*v(length)/(v(field)*v(drag))*(1-exp(-v(forward)))
Bgap gap 0 v=v(forward)-v(pull)*(v(forward)^2-v(reverse)^2)/2
Blift lift 0 v=({vd}-{vs})/((early*l)*v(length)*sqrt(({vd}-{vs})^2+(delta*delta)))
Bgms gms 0 v=max(v(end)*v(gap)+{current}*v(lift),1e-30)
Rwhite white 0 1
Eflicker gate g drop 0 1u
Rflicker drop 0 1k flicker
.model flicker r kf={{{strength}*1e6/(w*l*units)}} af=0 ef={exponent}
"""


class ChargeDevices(_OfProcess):
    """Behavioural transistors: a subcircuit for each channel, with the equations of the charge law.

    The simulator derives its own slopes from them. Noise is written out only where a bench asks for it.
    """

    def notes(self) -> list[str]:
        """Return what a reader has to know of these transistors."""
        told = ["transistors: the charge law of Enz, Krummenacher and Vittoz 1995, as behavioural sources"]
        return told if self._noisy else [*told, "noise: left out of the transistors, since no bench asks for it"]

    def cards(self, devices: Sequence[Device]) -> list[str]:
        """Return the subcircuit of each channel."""
        return [line for d in first_of_each(devices, "channel") for line in self._subcircuit(d)]

    def _subcircuit(self, device: Device) -> list[str]:
        gate = "gate" if self._noisy else "g"
        vg, vd, vs = (f"v({x},b)" if device.channel == "n" else f"v(b,{x})" for x in (gate, "d", "s"))
        text = _CHARGE.format(
            c=device.channel,
            parameters=self._parameters(device),
            vg=vg,
            vd=vd,
            vs=vs,
            ends="d s" if device.channel == "n" else "s d",
            current=_CHARGE_CURRENT,
            white="+sqrt(max(v(share)*v(gms),1e-30))*v(white)" if self._noisy else "",
            junction_d="b d" if device.channel == "n" else "d b",
            junction_s="b s" if device.channel == "n" else "s b",
            junction=self._junction(device),
            noise=self._noise(device, vd, vs) if self._noisy else "",
        )
        return [line for long in text.splitlines() for line in (wrapped(long) if long[0] != "*" else [long])]

    def _parameters(self, device: Device) -> str:
        named = {
            "vt0": "threshold",
            "kp": "current_factor",
            "gamma": "body_effect",
            "phi": "surface_potential",
            "early": "early_voltage",
            "theta": "vertical_field",
            "critical": "critical_field",
            "oxide": "oxide_capacitance",
            "overlap": "overlap_capacitance",
        }
        values = {key: self._parameter(device, name) for key, name in named.items()}
        ut = float(thermal_voltage(self._circuit.conditions.temperature))
        return ".param " + " ".join(f"{key}={number(value)}" for key, value in {**values, "ut": ut}.items())

    def _junction(self, device: Device) -> str:
        named = {
            "cjo": "junction_capacitance",
            "vj": "junction_potential",
            "m": "junction_grading",
            "cjsw": "sidewall_capacitance",
            "php": "junction_potential",
            "mjsw": "sidewall_grading",
        }
        values = {key: self._parameter(device, name) for key, name in named.items()}
        values = {"is": NO_LEAK, **values, "fc": 0.4, "fcs": 0.4}
        return " ".join(f"{key}={number(value)}" for key, value in values.items())

    def _noise(self, device: Device, vd: str, vs: str) -> str:
        strength = self._parameter(device, "flicker_coefficient") / self._parameter(device, "oxide_capacitance")
        exponent = number(self._parameter(device, "flicker_exponent"))
        return _CHARGE_NOISE.format(exponent=exponent, strength=number(strength), vd=vd, vs=vs, current=_CHARGE_CURRENT)

    def lines(self, device: Device) -> list[str]:
        """Return a call of the subcircuit."""
        return wrapped(f"X{device.name} {device.ends} charge_{device.channel} {_shape(device, 'units')}")

    def figure(self, device: Device, figure: str, stage: str = STAGE) -> str:
        """Return the current of the channel, or the node of the saturation voltage."""
        if figure == "vdsat":
            return f"v(x{stage}.x{device.name}.vdsat)"
        return f"abs(@b.x{stage}.x{device.name}.bchannel[i])"

    def saved(self, device: Device, stage: str = STAGE) -> list[str]:
        """Return the current of the channel."""
        return [f"@b.x{stage}.x{device.name}.bchannel[i]"]


class TableDevices:
    """The designer's own library and device names; each finger of each unit is a device of its own, in parallel."""

    def __init__(self, circuit: Circuit, noisy: bool) -> None:
        """Take the sized stage.

        Raises InputError when its process names no library, or one that a deck cannot name.
        """
        library = circuit.process.library
        if library is None:
            raise InputError("the process names no SPICE library ([library] in the process file), so it has no deck")
        path = str(library.path.absolute())
        if _NO_PATH.search(path) or not path.isprintable():
            raise InputError(
                f"library.path: found {shorten(path)}; a deck can name no path with blanks, quotes, $ or ;: "
                "move the library, or make a link to it"
            )
        self._library, self._path, self._corner = library, Path(path), circuit.conditions.corner

    def notes(self) -> list[str]:
        """Return what a reader has to know of these transistors."""
        return [
            f"transistors: {self._library.nmos.name} and {self._library.pmos.name} of the designer's library, each "
            "finger of each unit a device; their noise and matching are the library's own",
            f"library: {self._path.name}, sha256 {self._library.sha256 or 'not recorded'}",
        ]

    def options(self, celsius: float) -> str:
        """Return the temperature; the library knows at which one its parameters were taken."""
        return f"temp={number(celsius)}"

    def twins(self, device: Device) -> dict[str, str]:
        """Return no nodes."""
        return {}

    def cards(self, devices: Sequence[Device]) -> list[str]:
        """Return the lines that read the library."""
        return self._library.includes(self._corner, self._path)

    def lines(self, device: Device) -> list[str]:
        """Return a call of the library's transistor."""
        nodes = {"d": device.drain, "g": device.gate, "s": device.source, "b": device.bulk}
        shape = {
            "width": device.width / device.fingers,
            "length": device.length,
            "multiple": float(device.fingers * device.units),
            "drain_area": device.drain_area / device.fingers,
            "source_area": device.source_area / device.fingers,
            "drain_edge": device.drain_edge / device.fingers,
            "source_edge": device.source_edge / device.fingers,
        }
        known = self._library.device(device.channel)
        return wrapped(known.call(device.name, nodes, shape, self._library.unit))

    def figure(self, device: Device, figure: str, stage: str = STAGE) -> str:
        """Return the figure of the transistor inside the library's subcircuit."""
        return f"abs({self._vector(device, figure, stage)})"

    def _vector(self, device: Device, figure: str, stage: str) -> str:
        known = self._library.device(device.channel)
        if known.kind == "model":
            return f"@m.x{stage}.m{device.name}[{figure}]"
        return known.vector(f"{stage}.x{device.name}", figure)

    def saved(self, device: Device, stage: str = STAGE) -> list[str]:
        """Return the figures that are read."""
        return [self._vector(device, figure, stage) for figure in ("id", "vdsat")]


_NO_PATH = re.compile(r"[\s\"'`$;]")  # the simulator's .lib ends a path at a blank, quoted or not
DEVICES: dict[str, type[Devices]] = {"square": SquareDevices, "charge": ChargeDevices, "table": TableDevices}
