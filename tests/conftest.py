"""What several rooms' tests use: the command line in a directory of its own, and one small run to read."""

from __future__ import annotations

import shutil
from collections.abc import Callable
from pathlib import Path

import pytest
from typer.testing import CliRunner, Result

from optisize.cli import app
from tests.problem.texts import RESISTOR

Cli = Callable[..., Result]


@pytest.fixture
def cli(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Cli:
    """Call a command in an empty directory: `cli("front", "run")`."""
    monkeypatch.chdir(tmp_path)

    def call(*words: str) -> Result:
        return CliRunner().invoke(app, list(words))

    return call


@pytest.fixture(scope="session")
def finished_run(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A run of the problem with resistors, searched once; not to be changed."""
    place = tmp_path_factory.mktemp("finished")
    (place / "stage.toml").write_text(RESISTOR, encoding="utf-8")
    words = ["search", str(place / "stage.toml"), "--to", str(place / "run"), "--no-figures", "--quiet"]
    result = CliRunner().invoke(app, words)
    assert result.exit_code == 0, result.stderr
    return place / "run"


@pytest.fixture
def run_copy(finished_run: Path, tmp_path: Path) -> Path:
    """A copy of that run in the test's own directory, named `run`."""
    return Path(shutil.copytree(finished_run, tmp_path / "run"))
