"""What a measure is: its name, unit, sense, definition and parameters, and how a function becomes one."""

from __future__ import annotations

import inspect
from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np

from optisize.process.law import Array
from optisize.stage.analysis import Analysis

PRACTICE = "common practice, no source"
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


def entry(
    catalogue: dict[str, Measure],
    unit: str,
    better: Sense,
    *,
    scale: Scale = "log",
    step: float = 1.0,
    signed: bool = False,
    source: str = PRACTICE,
    parameters: tuple[Parameter, ...] = (),
) -> Callable[[Callable[..., Array]], Callable[..., Array]]:
    """Enter a function into a catalogue under its own name."""

    def enter(function: Callable[..., Array]) -> Callable[..., Array]:
        text = " ".join((inspect.getdoc(function) or "").split())
        name = function.__name__
        # Absurd sizings divide by nothing; what is not finite is told by the values, not by warnings.
        quiet = np.errstate(all="ignore")(function)
        catalogue[name] = Measure(name, unit, better, scale, step, signed, source, text, quiet, parameters)
        return quiet

    return enter
