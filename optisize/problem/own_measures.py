"""What a problem says of measures with parameters: the table ``[measures]``, and how to call such a measure.

A name of the catalogue gets its parameters for the whole problem; another name, with ``of``, is a measure of its own.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from typing import Any

from optisize.errors import InputError, listing, nearest, shorten
from optisize.quantities import QuantityError, read, write
from optisize.stage.assembly import Topology
from optisize.stage.measures import CATALOGUE, Measure, Parameter, Setting

LONGEST_NAME = 40
NAME = r"[a-z][a-z0-9_]*"
_COLUMN = "design"  # of a front, beside the measures


def own_measures(table: Mapping[str, Any], topology: Topology) -> dict[str, Measure]:
    """Return the measures of a table ``[measures]`` by name, each with its settings in SI units.

    Args:
        table: as it was read from the file.
        topology: the stage, whose parts lend their names to no measure.

    Raises InputError for a name, a key or a value that is wrong.
    """
    return {name: _own_measure(name, value, topology) for name, value in table.items()}


def with_parameters() -> dict[str, Measure]:
    """Return the measures of the catalogue that have parameters."""
    return {name: measure for name, measure in CATALOGUE.items() if measure.parameters}


def _own_measure(name: str, value: object, topology: Topology) -> Measure:
    given = value if isinstance(value, dict) else {}
    measure = _of(name, given["of"], topology) if "of" in given else _of_its_own_name(name)
    known = {p.name: p for p in measure.parameters}
    if not isinstance(value, dict):
        first = measure.parameters[0]
        example = f"{{ {first.name} = {in_file(first, first.default)} }}"
        raise InputError(f"measures.{name}: found {shorten(value)}; a table is needed, such as {example}")
    for key in given:
        if key != "of" and key not in known:
            allowed = listing(["of", *known])
            raise InputError(f"measures.{name}.{key}: unknown key; allowed are {allowed}{nearest(key, known)}")
    chosen = [p for p in measure.parameters if p.name in given]
    return measure.at(name, {p.name: _setting(f"measures.{name}.{p.name}", given[p.name], p) for p in chosen})


def _of_its_own_name(name: str) -> Measure:
    """Return the measure of the catalogue that is given other parameters."""
    if name not in CATALOGUE:
        raise InputError(
            f'measures.{name}: no measure of the catalogue; "optisize measures" lists them, '
            f'and a name of your own needs of = "…"{nearest(name, with_parameters())}'
        )
    if not CATALOGUE[name].parameters:
        raise InputError(f"measures.{name}: has no parameters; measures with parameters are {_listed()}")
    return CATALOGUE[name]


def _of(name: str, of: object, topology: Topology) -> Measure:
    """Return the measure of the catalogue that a name of the problem's own stands for."""
    if name != of:
        _check_name(name, topology)
    if not isinstance(of, str) or of not in CATALOGUE:
        hint = nearest(of, with_parameters()) if isinstance(of, str) else ""
        raise InputError(
            f"measures.{name}.of: found {shorten(of)}; the name of a measure of the catalogue is needed, "
            f"one with parameters: {_listed()}{hint}"
        )
    if not CATALOGUE[of].parameters:
        raise InputError(
            f"measures.{name}.of: found {shorten(of)}; it has no parameters; measures with parameters are {_listed()}"
        )
    return CATALOGUE[of]


def _listed() -> str:
    return listing(with_parameters())


def _check_name(name: str, topology: Topology) -> None:
    """Raise InputError for a name that is no name of a measure of one's own."""
    if name in CATALOGUE:
        raise InputError(f"measures.{name}: is a measure of the catalogue already; give this one a name of its own")
    if not re.fullmatch(NAME, name):
        raise InputError(f"measures.{name}: a name begins with a small letter, then has small letters, digits and _")
    if len(name) > LONGEST_NAME:
        raise InputError(f"measures.{name}: at most {LONGEST_NAME} characters are allowed")
    parts = {part.split(".")[0] for part in (*topology.size_names, *(t.name for t in topology.transistors))}
    if name in parts or name == _COLUMN:
        what = "a column of the front" if name == _COLUMN else "a part of the stage"
        raise InputError(f"measures.{name}: is the name of {what}; give the measure another one")


def _setting(key: str, value: object, parameter: Parameter) -> Setting:
    """Read the value of a parameter, or the two values of a band."""
    if not isinstance(parameter.default, tuple):
        return _number(key, value, value, parameter)
    if not isinstance(value, list) or len(value) != 2:
        example = in_file(parameter, parameter.default)
        raise InputError(f"{key}: found {shorten(value)}; two values are needed, such as {example}")
    low, high = (_number(key, part, value, parameter) for part in value)
    if low >= high:
        raise InputError(f"{key}: found {shorten(value)}; the first value must be below the second")
    return low, high


def _number(key: str, part: object, value: object, parameter: Parameter) -> float:
    """Read one number of a value and hold it against what is allowed."""
    try:
        number = read(part, parameter.unit)
    except QuantityError as error:
        raise InputError(f"{key}: found {shorten(value)}; {error}") from None
    if parameter.low <= number <= parameter.high:
        return number
    relation, bound = ("at least", parameter.low) if number < parameter.low else ("at most", parameter.high)
    bare = f" (a bare number is in {parameter.unit})" if parameter.unit and not isinstance(part, str) else ""
    raise InputError(f"{key}: found {shorten(value)}; it must be {relation} {write(bound, parameter.unit, 6)}{bare}")


def in_file(parameter: Parameter, value: Setting) -> str:
    """Return a value as a problem file has it: ``"1 kHz"``, ``["1 Hz", "10 kHz"]`` or a bare ``3``."""
    if isinstance(value, tuple):
        return f"[{', '.join(in_file(parameter, part) for part in value)}]"
    text = write(value, parameter.unit)
    return f'"{text}"' if parameter.unit else text


def in_words(parameter: Parameter, value: Setting) -> str:
    """Return a value as tables have it: ``1 kHz``, ``1 Hz to 10 kHz`` or ``3``."""
    parts = value if isinstance(value, tuple) else (value,)
    return " to ".join(write(part, parameter.unit) for part in parts)


def origin(measure: Measure) -> str:
    """Return the name that a measure has in the catalogue; its own name where it is not from there."""
    return next((name for name, known in CATALOGUE.items() if known.function is measure.function), measure.name)


def taken_at(measure: Measure) -> str:
    """Say how a measure with parameters is taken: ``at 100 kHz``, ``at DC``, ``1 Hz to 10 kHz``, ``sigmas = 3``."""
    return ", ".join(_phrase(p, measure.taken_at[p.name]) for p in measure.parameters)


def _phrase(parameter: Parameter, value: Setting) -> str:
    """Say one setting: a value with a unit speaks for itself, a bare one needs its name."""
    if parameter.unit == "Hz" and value == 0.0:
        return "at DC"
    if not parameter.unit:
        return f"{parameter.name} = {in_words(parameter, value)}"
    return f"{'' if isinstance(value, tuple) else 'at '}{in_words(parameter, value)}"


def label(measure: Measure) -> str:
    """Return the name of a measure with its settings, where there is room for them.

    ``wideband (input_noise at 100 kHz)``, ``input_noise (at 1 kHz)``, and ``gain`` where there is none to set.
    """
    if not measure.parameters:
        return measure.name
    of = origin(measure)
    named = f"{of} " if of != measure.name else ""
    return f"{measure.name} ({named}{taken_at(measure)})"


def parameter_line(parameter: Parameter) -> str:
    """Return a parameter with its default and meaning: ``frequency = 1 kHz (where it is taken)``."""
    return f"{parameter.name} = {in_words(parameter, parameter.default)} ({parameter.meaning})"
