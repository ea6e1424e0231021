"""The JSON Schemas that are printed describe the files that ship: a light structural check, no full validator."""

from __future__ import annotations

import contextlib
import json
import re
import tomllib
from importlib import resources
from pathlib import Path
from typing import Any

import pytest

from optisize.errors import InputError
from tests.conftest import Cli
from tests.problem.texts import MIRROR, RESISTOR, SIZING, changed, loaded

PROBLEMS = sorted((Path(__file__).parents[2] / "problems").glob("*.toml"))
PROCESSES = sorted(Path(str(resources.files("optisize.process").joinpath("data"))).glob("*.toml"))
TYPES: dict[str, Any] = {"object": dict, "array": list, "string": str, "boolean": bool, "integer": int}


def fits(value: Any, schema: Any, root: Any) -> bool:
    """Tell whether a value has the structure of a schema: the keywords that these schemas use."""
    if schema is True or schema == {}:
        return True
    if "$ref" in schema:
        return fits(value, root["$defs"][schema["$ref"].rsplit("/", 1)[1]], root)
    if "anyOf" in schema and not any(fits(value, part, root) for part in schema["anyOf"]):
        return False
    if "enum" in schema and value not in schema["enum"]:
        return False
    kind = schema.get("type")
    if kind == "number" and (isinstance(value, bool) or not isinstance(value, int | float)):
        return False
    if kind in TYPES and not isinstance(value, TYPES[kind]):
        return False
    if isinstance(value, str) and "pattern" in schema and not re.search(schema["pattern"], value):
        return False
    if isinstance(value, list) and "items" in schema:
        size = schema.get("minItems", 0) <= len(value) <= schema.get("maxItems", len(value))
        return size and all(fits(part, schema["items"], root) for part in value)
    return fits_table(value, schema, root) if isinstance(value, dict) else True


def fits_table(value: dict[str, Any], schema: Any, root: Any) -> bool:
    known, other = schema.get("properties", {}), schema.get("additionalProperties", True)
    if any(key not in value for key in schema.get("required", ())) or len(value) < schema.get("minProperties", 0):
        return False
    return all(
        fits(part, known.get(key, other), root) if known.get(key, other) else False for key, part in value.items()
    )


@pytest.fixture
def schema(cli: Cli) -> Any:
    return lambda kind: json.loads(cli("schema", kind).stdout)


@pytest.mark.parametrize("path", PROBLEMS, ids=lambda p: p.stem)
def test_shipped_problems_fit_the_schema(schema: Any, path: Path) -> None:
    root = schema("problem")
    assert fits(tomllib.loads(path.read_text(encoding="utf-8")), root, root)


@pytest.mark.parametrize("path", PROCESSES, ids=lambda p: p.stem)
def test_shipped_processes_fit_the_schema(schema: Any, path: Path) -> None:
    root = schema("process")
    assert fits(tomllib.loads(path.read_text(encoding="utf-8")), root, root)


def test_sizings_and_new_problems_fit_the_schema(schema: Any, cli: Cli) -> None:
    root = schema("sizing")
    assert fits(tomllib.loads(SIZING), root, root)
    assert not fits(tomllib.loads(changed(SIZING, ("tail.units", "tail.units = [1, 2]"))), root, root)
    root = schema("problem")
    assert fits(tomllib.loads(MIRROR), root, root)
    cli("new", "fresh")
    assert fits(tomllib.loads(Path("fresh.toml").read_text(encoding="utf-8")), root, root)


NOISE = """[measures]
input_noise = { frequency = "10 Hz" }
wideband = { of = "input_noise", frequency = 1e5 }
total = { of = "input_noise_total", band = ["1 Hz", 1000] }
[goals]"""


@pytest.mark.parametrize(
    ("edit", "good"),
    [
        (("wideband", "wideband = { of = 'input_noise' }"), True),
        (("wideband", "input_noise_total = { band = [1, 2] }"), True),
        (("wideband", "wideband = { frequency = 1e5 }"), False),
        (("wideband", "wideband = { of = 'gain' }"), False),
        (("wideband", "wideband = { of = 'input_noise', band = [1, 2] }"), False),
        (("input_noise", "input_noise = { freqency = 1 }"), False),
        (("input_noise", "input_noise = 10"), False),
        (("total", "total = { of = 'input_noise_total', band = 1 }"), False),
        (("total", "total = { of = 'input_noise_total', band = [1] }"), False),
    ],
)
def test_measures_fit_the_schema_where_the_package_reads_them(
    schema: Any, edit: tuple[str, str], good: bool, tmp_path: Path
) -> None:
    root = schema("problem")
    text = changed(RESISTOR, ("[goals]", NOISE))
    assert fits(tomllib.loads(text), root, root)
    text = changed(text, edit)
    assert fits(tomllib.loads(text), root, root) is good
    with contextlib.nullcontext() if good else pytest.raises(InputError):
        loaded(tmp_path, text)


@pytest.mark.parametrize(
    "edit",
    [
        ("title", "title = 3"),
        ("title", ""),
        ("title", 'titel = "a"'),
        ("input", 'input = "npn"'),
        ("supply", "supply = true"),
        ("common_mode", "common_mode = [1, 2, 3]"),
        ("input.width", "input.width = [1, 2, 3]"),
        ("gain", 'gain = "maximise"'),
        ("bandwidth", "bandwidth = { mn = 1 }"),
        ("bandwidth", "bandwidth = {}"),
        ("seed", 'seed = "seven"'),
    ],
)
def test_the_schema_refuses_what_the_package_refuses(schema: Any, edit: tuple[str, str]) -> None:
    root = schema("problem")
    assert fits(tomllib.loads(RESISTOR), root, root)
    assert not fits(tomllib.loads(changed(RESISTOR, edit)), root, root)


def test_every_key_of_the_schema_is_described(schema: Any) -> None:
    for kind in ("problem", "process", "sizing"):
        root = schema(kind)
        for table in (root, *root.get("$defs", {}).values()):
            for key, part in table.get("properties", {}).items():
                assert "description" in part or "$ref" in part or "allOf" in part or key in ("nmos", "pmos"), key
