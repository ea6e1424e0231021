"""The problem file as it stands on disk: tables, types and units; its JSON Schema is the documentation."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass
from typing import Annotated, Any

from pydantic import BeforeValidator, ConfigDict, Field, WithJsonSchema

from optisize.errors import InputError, listing, nearest, shorten
from optisize.problem.own_measures import LONGEST_NAME, NAME, parameter_line, with_parameters
from optisize.process.parameters import Parameters
from optisize.quantities import In, QuantityError, read
from optisize.stage.elements import Form, Piece
from optisize.stage.measures import Parameter
from optisize.stage.topology import FORMS, LOADS, STAGE_WORDS, TAILS

LENGTHS = ("grid", "tabulated")


@dataclass(frozen=True)
class OneOf:
    """Marks a text of a pydantic model as one of the names of a register."""

    names: tuple[str, ...]

    def __get_pydantic_core_schema__(self, source: Any, handler: Callable[[Any], Any]) -> Any:
        """Refuse a name that is not in the register, and say which is nearest."""
        from pydantic_core import core_schema

        return core_schema.no_info_before_validator_function(self._check, handler(source))

    def _check(self, value: object) -> object:
        if value not in self.names:
            raise ValueError(f"allowed are {listing(self.names)}{nearest(str(value), self.names)}")
        return value

    def __get_pydantic_json_schema__(self, schema: Any, handler: Callable[[Any], Any]) -> dict[str, Any]:
        """List the names."""
        return {**handler(schema), "enum": list(self.names)}


def _read_range(value: object) -> tuple[float, float]:
    """Read one voltage or a range of two."""
    parts = value if isinstance(value, list) else [value, value]
    if len(parts) != 2:
        raise ValueError("one voltage or a range of two is needed")
    low, high = (read(part, "V") for part in parts)
    if low > high:
        raise ValueError("the range is inverted: its first value must be the lower one")
    return low, high


_QUANTITY = {"anyOf": [{"type": "number"}, {"type": "string"}]}
_RANGE = {"anyOf": [*_QUANTITY["anyOf"], {"type": "array", "items": _QUANTITY, "minItems": 2, "maxItems": 2}]}
_BOUNDS = {
    "type": "object",
    "properties": {"min": _QUANTITY, "max": _QUANTITY, "margin": _QUANTITY},
    "additionalProperties": False,
    "anyOf": [{"required": ["min"]}, {"required": ["max"]}],
}


def _named(leaf: dict[str, Any], depth: int = 3) -> dict[str, Any]:
    """Return the JSON Schema of a table whose dotted keys, up to `depth` parts, lead to leaves."""
    inner = leaf if depth == 1 else {"anyOf": [leaf, {**_named(leaf, depth - 1), "minProperties": 1}]}
    return {"type": "object", "additionalProperties": inner}


def _measures_schema() -> dict[str, Any]:
    """Return the JSON Schema of the table that sets the parameters of measures."""
    known = {name: _settings_schema(name, m.parameters) for name, m in with_parameters().items()}
    other = [{**leaf, "required": ["of"]} for leaf in known.values()]
    return {
        "type": "object",
        "propertyNames": {"pattern": f"^{NAME}$", "maxLength": LONGEST_NAME},
        "properties": known,
        "additionalProperties": {"anyOf": other} if other else False,
    }


def _settings_schema(name: str, parameters: Iterable[Parameter]) -> dict[str, Any]:
    """Return the JSON Schema of the settings of one measure of the catalogue."""
    keys = {p.name: _parameter_schema(p) for p in parameters}
    return {"type": "object", "properties": {"of": {"enum": [name]}, **keys}, "additionalProperties": False}


def _parameter_schema(parameter: Parameter) -> dict[str, Any]:
    """Return the JSON Schema of one parameter of a measure."""
    description = parameter_line(parameter)
    if not isinstance(parameter.default, tuple):
        return {**_QUANTITY, "description": description}
    return {"type": "array", "items": _QUANTITY, "minItems": 2, "maxItems": 2, "description": description}


def _summaries(kinds: Mapping[str, Piece] | Mapping[str, Form]) -> str:
    return "; ".join(f"{name}: {kind.summary}" for name, kind in kinds.items())


class StageTable(Parameters):
    """The circuit: input pair, load, tail and output."""

    input: Annotated[str, OneOf(STAGE_WORDS["input"]), Field(description="channel of the input pair")]
    load: Annotated[str, OneOf(STAGE_WORDS["load"]), Field(description=_summaries(LOADS))]
    tail: Annotated[str, OneOf(STAGE_WORDS["tail"]), Field(description=_summaries(TAILS))]
    output: Annotated[
        str,
        OneOf(STAGE_WORDS["output"]),
        Field(description="one drain, or the difference of both"),
    ] = "single-ended"
    form: Annotated[
        str,
        OneOf(STAGE_WORDS["form"]),
        Field(description=_summaries(FORMS)),
    ] = "simple"
    bulk: Annotated[
        str,
        OneOf(STAGE_WORDS["bulk"]),
        Field(description="bulk of the input pair: at its channel's rail, or tied to the source in a well of its own"),
    ] = "rail"


class ConditionsTable(Parameters):
    """What the stage is exposed to."""

    supply: Annotated[float, In("V"), Field(gt=0, le=100, description="supply voltage")]
    common_mode: Annotated[
        tuple[float, float],
        BeforeValidator(_read_range),
        WithJsonSchema(_RANGE),
        Field(description="common-mode input voltage: a value, or a range that every design must live with"),
    ]
    load_capacitance: Annotated[
        float, In("F"), Field(ge=0, le=1e-3, description="capacitance from each output to ground")
    ]
    temperature: Annotated[float, In("K"), Field(gt=150, lt=500, description="temperature")] = 300.15
    corner: Annotated[str, Field(description="process corner")] = "typical"
    output_common_mode: Annotated[
        float | None,
        In("V"),
        Field(
            description="where a source load's common-mode control holds the outputs; of a single-ended output, "
            "where the next stage wants it at rest, which offset_systematic is counted from"
        ),
    ] = None


class SearchTable(Parameters):
    """How long and from where to search."""

    population: Annotated[int, Field(strict=True, ge=8, le=20_000, description="designs of a generation")] = 200
    generations: Annotated[int, Field(strict=True, ge=1, le=1_000_000, description="generations at the most")] = 200
    seed: Annotated[int, Field(strict=True, ge=0, le=2**63 - 1, description="the same seed gives the same front")] = 1
    patience: Annotated[
        int,
        Field(
            strict=True,
            ge=0,
            description="generations without gain of hypervolume after which the search stops; 0: never",
        ),
    ] = 60


class ProblemFile(Parameters):
    """A problem: a stage in a process under conditions, its free sizes, its goals and limits."""

    model_config = ConfigDict(extra="forbid", frozen=True, title="optisize problem file")

    title: Annotated[str, Field(max_length=200, description="what the stage is for")]
    process: Annotated[str, Field(description="a built-in process, or the path of a process file")]
    lengths: Annotated[
        str,
        OneOf(LENGTHS),
        Field(description="the channel lengths that are searched: on the process grid, or those of its tables only"),
    ] = "grid"
    stage: StageTable
    conditions: ConditionsTable
    sizes: Annotated[
        dict[str, Any],
        WithJsonSchema(_named(_RANGE, 4)),
        Field(description="every size of the stage: one value fixes it, two values free it between them"),
    ]
    measures: Annotated[
        dict[str, Any],
        WithJsonSchema(_measures_schema()),
        Field(
            description="parameters of measures: a name of the catalogue with the keys that are its parameters, "
            "or a name of your own with the same keys and of, the measure that it stands for; "
            "a parameter that is not there keeps its default",
            default_factory=dict,
        ),
    ]
    goals: Annotated[
        dict[str, Any],
        WithJsonSchema(_named({"enum": ["max", "min"]})),
        Field(description='measures to trade on the front, each "max" or "min"'),
    ]
    limits: Annotated[
        dict[str, Any],
        WithJsonSchema(_named(_BOUNDS)),
        Field(
            description='bounds on measures: { min = "…" }, { max = "…" } or both; with margin = "…", in the unit of '
            'the measure or as "1 %" of the bound, a search keeps that far inside',
            default_factory=dict,
        ),
    ]
    search: SearchTable = SearchTable()


class SizingFile(Parameters):
    """One sizing by hand: a value for every size of a stage."""

    model_config = ConfigDict(extra="forbid", frozen=True, title="optisize sizing file")

    title: Annotated[str, Field(max_length=200, description="what the sizing is")] = ""
    sizes: Annotated[
        dict[str, Any], WithJsonSchema(_named(_QUANTITY, 4)), Field(description="one value for every size")
    ]


def flatten(table: Mapping[str, Any], is_leaf: Callable[[str, Any], bool], path: str) -> dict[str, Any]:
    """Return a nested table with dotted keys: ``{"input": {"width": 1}}`` becomes ``{"input.width": 1}``.

    Args:
        table: as it was read.
        is_leaf: tells of a dotted key and its table whether the table is a value.
        path: the key of the table itself.

    Raises InputError for a key that is there twice, once dotted and once in quotes.
    """
    flat: dict[str, Any] = {}
    waiting = list(reversed([*table.items()]))
    while waiting:
        name, value = waiting.pop()
        if isinstance(value, dict) and value and not is_leaf(name, value):
            waiting.extend((f"{name}.{key}", value[key]) for key in reversed([*value]))
        elif name in flat:
            raise InputError(f"{path}.{name}: is there twice")
        else:
            flat[name] = value
    return flat


def read_size(value: object, unit: str) -> tuple[float, float]:
    """Read one value or a range of two.

    Raises QuantityError.
    """
    parts = value if isinstance(value, list | dict) else [value, value]
    if len(parts) != 2 or isinstance(parts, dict):
        raise QuantityError(f"found {shorten(value)}; one value or a range of two is needed")
    low, high = (_positive(part, unit) for part in parts)
    if low > high:
        raise QuantityError(f"found {shorten(value)}; the range is inverted: its first value must be the lower one")
    return low, high


def _positive(value: object, unit: str) -> float:
    try:
        number = read(value, unit)
    except QuantityError as error:
        raise QuantityError(f"found {shorten(value)}; {error}") from None
    if number <= 0.0:
        raise QuantityError(f"found {shorten(value)}; a value above zero is needed")
    return number
