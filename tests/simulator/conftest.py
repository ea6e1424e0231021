"""Programs that pretend to be the circuit simulator."""

from __future__ import annotations

import sys
from collections.abc import Callable
from pathlib import Path

import pytest

Pretender = Callable[[str], Path]


@pytest.fixture
def pretender(tmp_path: Path) -> Pretender:
    """Make a program of lines of Python that is started in place of the simulator."""

    def make(code: str) -> Path:
        path = tmp_path / "pretender"
        path.write_text(f"#!{sys.executable}\nimport os, sys, time\n{code}\n", encoding="utf-8")
        path.chmod(0o755)
        return path

    return make
