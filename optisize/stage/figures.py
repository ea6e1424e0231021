"""The figures of each transistor at the operating point, (T, N): named like ``input.p.gm`` as goals or limits."""

from __future__ import annotations

from collections.abc import Callable

from optisize.process.law import Array
from optisize.stage.analysis import Analysis
from optisize.stage.catalogue import Measure, Sense, entry

FIGURES: dict[str, Measure] = {}


def _figure(unit: str, better: Sense, **options: object) -> Callable[..., Callable[..., Array]]:
    return entry(FIGURES, unit, better, **options)  # type: ignore[arg-type]


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
