"""Reading TOML with one clear message for whatever is wrong, and writing files whole or not at all."""

from __future__ import annotations

import difflib
import os
import shutil
import tempfile
import tomllib
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path
from typing import Any, TypeVar, get_args

from pydantic import BaseModel, ValidationError

from optisize.errors import InputError, OptisizeError, listing, nearest, shorten
from optisize.quantities import In, write

SIZE_LIMIT = 1_000_000  # bytes; a problem or process file is some kilobytes
KEY_LIMIT = 100  # characters of one key
DEPTH_LIMIT = 10  # tables and lists inside each other

Model = TypeVar("Model", bound=BaseModel)


def read_toml(path: Path) -> dict[str, Any]:
    """Return the tables of a TOML file.

    Raises InputError when the file is missing, unreadable, too large, not text, empty, not TOML, or nested without end.
    """
    data = read_bytes(path)
    try:
        text = data.decode("utf-8-sig")
    except UnicodeDecodeError:
        raise InputError(f"{path}: not a text file in UTF-8") from None
    if "\0" in text:
        raise InputError(f"{path}: not a text file (it holds NUL bytes)")
    if not text.strip():
        raise InputError(f"{path}: the file is empty")
    try:
        tables = tomllib.loads(text)
    except ValueError as error:
        raise InputError(f"{path}: not valid TOML: {error}") from None
    except RecursionError:
        raise InputError(f"{path}: not valid TOML: nested too deeply") from None
    _check_shape(tables, path)
    return tables


def _check_shape(tables: dict[str, Any], path: Path) -> None:
    """Raise InputError for keys that no message could show, and for tables or lists that are nested too deeply."""
    waiting: list[tuple[Any, int]] = [(tables, 0)]
    while waiting:
        value, depth = waiting.pop()
        if depth > DEPTH_LIMIT:
            raise InputError(f"{path}: tables or lists are nested more than {DEPTH_LIMIT} deep")
        for key in value if isinstance(value, dict) else ():
            if not key.isprintable() or len(key) > KEY_LIMIT:
                raise InputError(f"{path}: the key {shorten(key)} is too long or has characters that cannot be printed")
        parts = value.values() if isinstance(value, dict) else value
        waiting.extend((part, depth + 1) for part in parts if isinstance(part, dict | list))


def read_bytes(path: Path) -> bytes:
    """Return the content of an input file; raises InputError when it cannot be read or is too large."""
    try:
        if path.is_dir():
            raise InputError(f"{path}: is a directory, but a file is needed")
        if not path.exists():
            raise InputError(f"{path}: there is no such file{near_file(path)}")
        with path.open("rb") as file:
            data = file.read(SIZE_LIMIT + 1)
    except (OSError, ValueError) as error:
        raise InputError(f"{path}: cannot be read: {getattr(error, 'strerror', None) or error}") from None
    if len(data) > SIZE_LIMIT:
        raise InputError(f"{path}: larger than {SIZE_LIMIT // 1000} kB, which no problem or process file is")
    return data


def near_file(path: Path) -> str:
    """Name the file beside the wanted one whose name is nearest, as a hint."""
    try:
        names = [p.name for p in path.parent.iterdir()]
    except (OSError, ValueError):
        return ""
    close = difflib.get_close_matches(path.name, names, n=1, cutoff=0.6)
    return f'; did you mean "{path.parent / close[0]}"?' if close else ""


def validated(model: type[Model], data: dict[str, Any], file: str, prefix: Sequence[str] = ()) -> Model:
    """Return the model filled from a table of a file; raises InputError with the first thing that is wrong."""
    try:
        return model.model_validate(data)
    except ValidationError as error:
        raise InputError(f"{file}: {_first_problem(error, model, prefix)}") from None


def _first_problem(error: ValidationError, model: type[BaseModel], prefix: Sequence[str]) -> str:
    """Say in one line what is wrong: key, what was found, what is allowed, nearest name."""
    problems = error.errors(include_url=False, include_context=True)
    # An unknown key is the likeliest cause of a missing one, so it is named first.
    first = next((p for p in problems if p["type"] == "extra_forbidden"), problems[0])
    whole = first["type"] in ("extra_forbidden", "missing")
    location = [str(part) for part in first["loc"][:-1] if not _is_noise(part)]
    location += [str(part) for part in first["loc"][-1:] if whole or not _is_noise(part)]
    key = ".".join([*prefix, *location]) or "the file"
    found = shorten(first["input"])
    if first["type"] == "extra_forbidden":
        allowed = _allowed_keys(model, location[:-1])
        return f"{key}: unknown key; allowed are {listing(allowed)}{nearest(location[-1], allowed)}"
    if first["type"] == "missing":
        return f"{key}: is missing"
    return f"{key}: found {found}; {_need(first, _unit(model, location))}"


_NEEDS = {
    "model_type": "a table is needed",
    "model_attributes_type": "a table is needed",
    "dict_type": "a table is needed",
    "string_type": "a text is needed",
    "int_type": "a whole number is needed",
    "int_from_float": "a whole number is needed",
}
_BOUNDS = {
    "greater_than": ("gt", "above"),
    "greater_than_equal": ("ge", "at least"),
    "less_than": ("lt", "below"),
    "less_than_equal": ("le", "at most"),
}


def _need(problem: Any, unit: str) -> str:
    """Say what a value has to be, in a designer's words."""
    kind = problem["type"]
    if kind in _NEEDS:
        return _NEEDS[kind]
    if kind in _BOUNDS:
        name, relation = _BOUNDS[kind]
        bound = write(problem["ctx"][name], unit, 6) if unit else str(problem["ctx"][name])
        bare = f" (a bare number is in {unit})" if unit and not isinstance(problem["input"], str) else ""
        return f"it must be {relation} {bound}{bare}"
    if kind == "string_too_long":
        return f"at most {problem['ctx']['max_length']} characters are allowed"
    message = str(problem["msg"]).removeprefix("Value error, ")
    return f"{message[:1].lower()}{message[1:]}"


def _unit(model: type[BaseModel], location: Sequence[str]) -> str:
    """Return the unit of the field at a location, or an empty text."""
    table = _table(model, location[:-1])
    field = table.model_fields.get(location[-1]) if location else None
    return next((mark.unit for mark in field.metadata if isinstance(mark, In)), "") if field else ""


def _is_noise(part: Any) -> bool:
    """Tell whether a part of a pydantic location is no key of the file."""
    text = str(part)
    return "[" in text or text.endswith("Parameters")


def _allowed_keys(model: type[BaseModel], location: Sequence[str]) -> list[str]:
    """Return the keys that the table at a location may have."""
    return list(_table(model, location).model_fields)


def _table(model: type[BaseModel], location: Sequence[str]) -> type[BaseModel]:
    """Return the model of the table at a location; tables of free names are passed through by their last argument."""
    current: Any = model
    for part in location:
        fields = getattr(current, "model_fields", None)
        inner = fields[part].annotation if fields and part in fields else get_args(current)[-1:]
        current = inner[0] if isinstance(inner, tuple) and inner else inner
    return current if isinstance(current, type) and issubclass(current, BaseModel) else model


def quoted(text: str) -> str:
    """Return a text as TOML writes it."""
    escaped = text.replace("\\", "\\\\").replace('"', '\\"')
    return f'"{"".join(c if c.isprintable() else "?" for c in escaped)}"'


def write_text(path: Path, text: str) -> None:
    """Write a text file whole or not at all: beside first, then renamed.

    Raises OptisizeError when it cannot be written.
    """
    write_bytes(path, text.encode("utf-8"))


def write_bytes(path: Path, data: bytes) -> None:
    """Write a file as `write_beside` does."""
    write_beside(path, lambda beside: beside.write_bytes(data))


def write_beside(path: Path, fill: Callable[[Path], object]) -> None:
    """Write a file whole or not at all, beside first, then renamed; its directory is made where there is none.

    Args:
        path: of the file.
        fill: called with the place beside it, which it writes.

    Raises OptisizeError when it cannot be written.
    """
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        handle, name = tempfile.mkstemp(dir=path.parent, prefix=f".{path.name}.")
        os.close(handle)
        try:
            fill(Path(name))
            os.chmod(name, 0o644)
            os.replace(name, path)
        except BaseException:
            os.unlink(name)
            raise
    except OSError as error:
        raise OptisizeError(f"{path}: cannot be written: {error.strerror or error}") from None


def write_directory(directory: Path, files: Mapping[str, str]) -> None:
    """Write a new directory of text files, whole or not at all: beside first, then renamed.

    Raises OptisizeError when it cannot be written.
    """
    try:
        directory.parent.mkdir(parents=True, exist_ok=True)
        beside = Path(tempfile.mkdtemp(prefix=f".{directory.name}.", dir=directory.parent))
        try:
            for name, text in files.items():
                (beside / name).write_text(text, encoding="utf-8")
            beside.chmod(0o755)
            os.rename(beside, directory)
        finally:
            shutil.rmtree(beside, ignore_errors=True)
    except OSError as error:
        raise OptisizeError(f"{directory}: cannot be written: {error.strerror or error}") from None
