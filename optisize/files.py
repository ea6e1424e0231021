"""Reading TOML with one clear message for whatever is wrong, and writing files whole or not at all."""

from __future__ import annotations

import difflib
import os
import tempfile
import tomllib
from collections.abc import Sequence
from pathlib import Path
from typing import Any, TypeVar

from pydantic import BaseModel, ValidationError

from optisize.errors import InputError, OptisizeError, listing, shorten

SIZE_LIMIT = 1_000_000  # bytes; a problem or process file is some kilobytes

Model = TypeVar("Model", bound=BaseModel)


def read_toml(path: Path) -> dict[str, Any]:
    """Return the tables of a TOML file.

    Raises InputError when the file is missing, unreadable, too large, not text, empty, or not TOML.
    """
    data = read_bytes(path)
    try:
        text = data.decode("utf-8")
    except UnicodeDecodeError:
        raise InputError(f"{path}: not a text file in UTF-8") from None
    if "\0" in text:
        raise InputError(f"{path}: not a text file (it holds NUL bytes)")
    if not text.strip():
        raise InputError(f"{path}: the file is empty")
    try:
        return tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise InputError(f"{path}: not valid TOML: {error}") from None
    except RecursionError:
        raise InputError(f"{path}: not valid TOML: nested too deeply") from None


def read_bytes(path: Path) -> bytes:
    """Return the content of an input file; raises InputError when it cannot be read or is too large."""
    try:
        if path.is_dir():
            raise InputError(f"{path}: is a directory, but a file is needed")
        if not path.exists():
            raise InputError(f"{path}: there is no such file{_near_file(path)}")
        with path.open("rb") as file:
            data = file.read(SIZE_LIMIT + 1)
    except OSError as error:
        raise InputError(f"{path}: cannot be read: {error.strerror or error}") from None
    if len(data) > SIZE_LIMIT:
        raise InputError(f"{path}: larger than {SIZE_LIMIT // 1000} kB, which no problem or process file is")
    return data


def _near_file(path: Path) -> str:
    """Name the file beside the wanted one whose name is nearest."""
    try:
        names = [p.name for p in path.parent.iterdir()]
    except OSError:
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
    location = [str(part) for part in first["loc"] if not _is_noise(part)]
    key = ".".join([*prefix, *location]) or "the file"
    found = shorten(first["input"])
    if first["type"] == "extra_forbidden":
        allowed = _allowed_keys(model, location[:-1])
        close = difflib.get_close_matches(location[-1], allowed, n=1, cutoff=0.5)
        hint = f'; did you mean "{close[0]}"?' if close else ""
        return f"{key}: unknown key; allowed are {listing(allowed)}{hint}"
    if first["type"] == "missing":
        return f"{key}: is missing"
    if first["type"] == "literal_error":
        allowed = [part.strip(" '") for part in str(first["ctx"]["expected"]).replace(" or ", ",").split(",")]
        close = difflib.get_close_matches(str(first["input"]), allowed, n=1, cutoff=0.5)
        hint = f'; did you mean "{close[0]}"?' if close else ""
        return f"{key}: found {found}; allowed are {listing(allowed)}{hint}"
    message = str(first["msg"]).removeprefix("Value error, ")
    return f"{key}: found {found}; {message[:1].lower()}{message[1:]}"


def _is_noise(part: Any) -> bool:
    """Tell whether a part of a pydantic location is no key of the file."""
    text = str(part)
    return "[" in text or text.endswith("Parameters")


def _allowed_keys(model: type[BaseModel], location: Sequence[str]) -> list[str]:
    """Return the keys that the table at a location may have."""
    current: Any = model
    for part in location:
        fields = getattr(current, "model_fields", {})
        annotation = fields[part].annotation if part in fields else None
        current = annotation if isinstance(annotation, type) and issubclass(annotation, BaseModel) else current
    return list(current.model_fields)


def write_text(path: Path, text: str) -> None:
    """Write a text file whole or not at all: beside first, then renamed.

    Raises OptisizeError when it cannot be written.
    """
    try:
        handle, name = tempfile.mkstemp(dir=path.parent, prefix=f".{path.name}.")
        try:
            with os.fdopen(handle, "w", encoding="utf-8") as file:
                file.write(text)
            os.chmod(name, 0o644)
            os.replace(name, path)
        except BaseException:
            os.unlink(name)
            raise
    except OSError as error:
        raise OptisizeError(f"{path}: cannot be written: {error.strerror or error}") from None
