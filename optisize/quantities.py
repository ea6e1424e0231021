"""Engineering text to SI numbers and back: ``"250 nA"``, ``"6000 um^2"``, ``"3.5 mV*um"``, ``"20 nV/√Hz"``.

Inside the package every number is SI; text with prefixes lives in files, on the command line and in tables. Numbers
and prefixes are read and written by quantiphy. Powers and products need a reading of their own, since a prefix on an
area counts twice: 6000 um^2 are 6000e-12 m^2.
"""

from __future__ import annotations

import math
import re
from collections import Counter
from collections.abc import Callable
from dataclasses import dataclass
from decimal import Decimal, InvalidOperation
from functools import lru_cache
from typing import Any

from optisize.errors import shorten

ZERO_CELSIUS = 273.15

_NUMBER = re.compile(r"\s*([-+]?(?:\d+\.?\d*|\.\d+)(?:[eE][-+]?\d+)?)\s*(.*?)\s*", re.DOTALL)
_DECIMAL_COMMA = re.compile(r",\d")
_FACTOR = re.compile(r"([^\W\d_]+|%|1)(?:\^(-?\d(?:\.\d+)?))?")
_ROOT = re.compile(r"(?:√|sqrt|rt)\s*(?:\(([^()]*)\)|([^()]+))")
_ROOT_BELOW = re.compile(r"/(\w+)\^0\.5")  # as units are kept; tables write it with a root sign
_BASES = ("ohm", "degC", "deg", "dB", "Hz", "V", "A", "m", "F", "s", "K", "W", "S")
_ALIASES = str.maketrans({"µ": "u", "μ": "u", "\u03a9": "ohm", "\u2126": "ohm", "²": "^2", "·": "*"})
_NO_PREFIX = ("dB", "degC", "deg", "%", "1")
UNPREFIXED = ("", "dB", "deg", "V/V")  # written without a prefix


class QuantityError(ValueError):
    """A text is not a quantity of the unit that was asked for."""


def _plain(expression: str) -> str:
    """Return a unit expression in the letters that are parsed: ``Ω`` is ``ohm``, ``°C`` is ``degC``."""
    return expression.translate(_ALIASES).replace("°C", "degC").replace("°", "deg").strip()


@lru_cache(maxsize=1024)
def _parse_unit(expression: str) -> tuple[float, tuple[tuple[str, float], ...]]:
    """Return the scale to SI and the sorted dimensions of a unit expression such as ``uA/V^2`` or ``nV/√Hz``.

    Raises QuantityError when a factor is no known unit.
    """
    scale = 1.0
    powers: Counter[str] = Counter()
    text = _plain(expression)
    if not text:
        return 1.0, ()
    for sign, factor in _factors(text):
        root = _ROOT.fullmatch(factor.strip())
        match = _FACTOR.fullmatch((root.group(1) or root.group(2) or "" if root else factor).strip())
        if match is None:
            raise QuantityError(f"{shorten(expression)} is not a unit")
        power = sign * float(match.group(2) or 1.0) * (0.5 if root else 1.0)
        factor_scale, base = _parse_factor(match.group(1), expression)
        scale *= factor_scale**power
        if base:
            powers[base] += power  # type: ignore[assignment]
    if not 0.0 < scale < math.inf:
        raise QuantityError(f"{shorten(expression)} is not a unit")
    return scale, tuple(sorted((base, float(p)) for base, p in powers.items() if p))


def _factors(text: str) -> list[tuple[int, str]]:
    """Split ``a*b/c`` into factors with the sign of their power."""
    parts = re.split(r"([*/])", text)
    signs = [1] + [1 if mark == "*" else -1 for mark in parts[1::2]]
    return list(zip(signs, parts[::2], strict=True))


def _parse_factor(name: str, expression: str) -> tuple[float, str]:
    """Return scale and base of one factor: ``uA`` gives (1e-6, ``A``)."""
    if name in ("%", "1"):
        return (0.01 if name == "%" else 1.0), ""
    if name in _BASES:
        return 1.0, "K" if name == "degC" else name
    for base in _BASES:
        if base not in _NO_PREFIX and name.endswith(base):
            scale = _prefix_scale(name.removesuffix(base))
            if scale is not None:
                return scale, base
    raise QuantityError(f"{shorten(expression)} is not a unit")


def _prefix_scale(prefix: str) -> float | None:
    """Return the scale that quantiphy gives a prefix, or None when it knows no such prefix."""
    from quantiphy import Quantity

    quantity = Quantity(f"1 {prefix}V")
    return float(quantity.real) if len(prefix) == 1 and quantity.units == "V" else None


def read(value: object, unit: str) -> float:
    """Return a quantity in SI units.

    Args:
        value: text such as ``"250 nA"``, or a number already in SI units.
        unit: the SI unit that is wanted, such as ``"A"`` or ``"F/m^2"``; ``""`` for a plain number.

    Raises:
        QuantityError: not a finite number, or not of that unit.
    """
    if isinstance(value, bool) or not isinstance(value, int | float | str):
        raise QuantityError(f"a quantity{_example(unit)} is needed")
    try:
        number = _read_text(value, unit) if isinstance(value, str) else float(value)
    except (OverflowError, InvalidOperation):
        number = math.inf
    if not math.isfinite(number):
        raise QuantityError("a finite number is needed")
    return number


def _read_text(text: str, unit: str) -> float:
    """Return the number of a text in the SI unit that is wanted."""
    match = _NUMBER.fullmatch(text)
    if match is None:
        raise QuantityError(f"is not a number{' with a unit' if unit else ''}{_example(unit)}")
    figure, expression = match.groups()
    if _DECIMAL_COMMA.match(expression):
        raise QuantityError("a decimal point is needed in place of the comma")
    if _plain(expression) == "degC" and unit == "K":
        return float(figure) + ZERO_CELSIUS
    try:
        scale, dimensions = _parse_unit(expression)
    except QuantityError as error:
        raise QuantityError(f"{error}; {_unit_phrase(unit)} is needed{_example(unit)}") from None
    if dimensions != _parse_unit(unit)[1]:
        named = f"is in {shorten(expression)}" if expression else "has no unit"
        raise QuantityError(f"{named}, but {_unit_phrase(unit)} is needed{_example(unit)}")
    return _scaled(figure, scale)


def _scaled(figure: str, scale: float) -> float:
    """Return figure times scale, without rounding where the scale is a power of ten (250 nA is 2.5e-07 A)."""
    exponent = round(math.log10(scale))
    if math.isclose(scale, 10.0**exponent, rel_tol=1e-12):
        return float(Decimal(figure).scaleb(exponent))
    return float(figure) * scale


def _unit_phrase(unit: str) -> str:
    return f'a quantity in "{unit}"' if unit else "a plain number"


def _example(unit: str) -> str:
    examples = {
        "V": "1.8 V", "A": "250 nA", "m": "1.2 um", "m^2": "6000 um^2", "ohm": "5 kohm", "F": "500 fF",
        "Hz": "1 MHz", "K": "27 degC", "W": "60 uW", "dB": "40 dB", "V/s": "2 V/us", "deg": "60 deg",
        "V/Hz^0.5": "20 nV/√Hz",
    }  # fmt: skip
    return f' (such as "{examples[unit]}")' if unit in examples else ""


def write(value: float, unit: str, digits: int = 4) -> str:
    """Return a number in engineering notation: ``write(2.5e-7, "A")`` is ``250 nA``.

    Areas are written in um^2, slopes in V/us, noise densities in V/√Hz, decibels and degrees without a prefix; an
    infinite value is ``unlimited``.
    """
    from quantiphy import Quantity

    if math.isnan(value):
        return "undefined"
    if math.isinf(value):
        return "unlimited" if value > 0 else "-unlimited"
    if unit in _PREFERRED:
        return write_in(value, _PREFERRED[unit], digits)
    if unit in UNPREFIXED:
        return write_in(value, unit, digits)
    return str(Quantity(value, written(unit)).render(prec=digits - 1))


_PREFERRED = {"m^2": "um^2", "V/s": "V/us"}


def written(unit: str) -> str:
    """Return a unit as tables write it: ``V/√Hz`` for ``V/Hz^0.5``."""
    return _ROOT_BELOW.sub(r"/√\1", unit)


def write_in(value: float, unit: str, digits: int = 4) -> str:
    """Return a number in exactly the unit given, without choosing a prefix: ``8.5 fF/um^2``."""
    figure = value / _parse_unit(unit)[0] if unit else value
    return f"{_without_exponent(figure, digits)} {unit}".strip()


def _without_exponent(figure: float, digits: int) -> str:
    """Return a rounded number, 40000 as it is and not as 4e+04."""
    text = f"{figure:.{digits}g}"
    return f"{float(text):.0f}" if "e+" in text and abs(figure) < 1e9 else text


@dataclass(frozen=True)
class In:
    """Marks a number of a pydantic model as a quantity of one unit: ``Annotated[float, In("V")]``.

    Attributes:
        unit: the SI unit in which the number is kept.
        shown: the unit in which tables show it; a prefix is chosen where it is empty.
    """

    unit: str
    shown: str = ""

    def text(self, value: float) -> str:
        """Return the value as tables show it."""
        return write_in(value, self.shown) if self.shown else write(value, self.unit)

    def __get_pydantic_core_schema__(self, source: Any, handler: Callable[[Any], Any]) -> Any:
        """Read text before pydantic checks the number and its bounds."""
        from pydantic_core import core_schema

        return core_schema.no_info_before_validator_function(lambda value: read(value, self.unit), handler(source))

    def __get_pydantic_json_schema__(self, schema: Any, handler: Callable[[Any], Any]) -> dict[str, Any]:
        """Describe a number in SI units or a text with its unit."""
        unit = self.shown or self.unit or "1"
        number = {key: value for key, value in handler(schema).items() if key not in ("title", "description")}
        return {"anyOf": [number, {"type": "string", "pattern": r"^\s*[-+]?[0-9.]"}], "x-unit": unit}
