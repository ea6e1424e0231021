"""What several rooms' tests use: the command line in a directory of its own, one small run to read, and measures with
parameters that no catalogue has.
"""

from __future__ import annotations

import fcntl
import os
import re
import shlex
import shutil
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from typer.testing import CliRunner, Result

from optisize.cli import app
from optisize.process.law import Array
from optisize.stage.analysis import Analysis
from optisize.stage.measures import CATALOGUE, Measure, Parameter, Setting
from tests.problem.texts import RESISTOR
from tests.reference.library import open_library

Cli = Callable[..., Result]


def readme_command(begin: str) -> list[str]:
    """Return the words of a command that the README shows, without the program."""
    text = (Path(__file__).parents[1] / "README.md").read_text(encoding="utf-8").replace("\\\n", " ")
    lines = "".join(re.findall(r"```bash\n(.*?)```", text, re.DOTALL)).splitlines()
    (line,) = (x for x in lines if x.startswith(begin))
    return shlex.split(line)[1:]


def call(*words: str) -> Result:
    """Call a command: `call("front", "run")`."""
    return CliRunner().invoke(app, list(words))


@pytest.fixture
def cli(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Cli:
    """Call a command in an empty directory: `cli("front", "run")`."""
    monkeypatch.chdir(tmp_path)
    return call


@pytest.fixture(scope="session")
def ngspice() -> str:
    """The path of the circuit simulator; a machine without it skips, but continuous integration has to have it."""
    path = shutil.which("ngspice")
    if path is None:
        reason = "the circuit simulator ngspice is not installed"
        if os.environ.get("CI") == "true":
            pytest.fail(reason)
        pytest.skip(reason)
    return path


@pytest.fixture(scope="session")
def open_process(ngspice: str, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The file `process/open.toml` as the README's command makes it of the open library; once for all workers."""
    library = open_library()
    base = tmp_path_factory.getbasetemp()
    place = (base.parent if "PYTEST_XDIST_WORKER" in os.environ else base) / "open-library"
    place.mkdir(exist_ok=True)
    path = place / "process" / "open.toml"
    with open(place / "lock", "w", encoding="ascii") as lock:
        fcntl.flock(lock, fcntl.LOCK_EX)
        if not path.exists():
            words = readme_command("optisize process characterise models/all.spice")
            places = {"models/all.spice": str(library), "process/open.toml": str(path)}
            result = call(*(places.get(word, word) for word in words), "--quiet")
            assert result.exit_code == 0, result.stderr
    return path


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


def _hum(a: Analysis, frequency: float) -> Array:
    """A density that falls with frequency."""
    return np.sqrt((1.0 + 1e3 / frequency) / a.drain.gm[a.wiring.pair].sum(axis=0)) * 1e-10


def _hum_total(a: Analysis, band: tuple[float, float]) -> Array:
    """The same over a band."""
    low, high = band
    return _hum(a, 1e3) * np.sqrt(high - low)


def _unlikeness(a: Analysis, sigmas: float, frequency: float) -> Array:
    """Something with two parameters."""
    return sigmas * np.abs(a.acm) * frequency / 1e3


@pytest.fixture
def humming(monkeypatch: pytest.MonkeyPatch) -> None:
    """Three more measures in the catalogue: `hum` at a frequency, `hum_total` over a band, `unlikeness` with two."""

    def enter(name: str, unit: str, function: Callable[..., Array], *parameters: Parameter) -> None:
        text = "As tests need it."
        entry = Measure(name, unit, "min", "log", 1.0, False, "no source", text, function, parameters)
        monkeypatch.setitem(CATALOGUE, name, entry)

    def frequency(default: Setting) -> Parameter:
        return Parameter("frequency", "Hz", "where it is taken", default, 1e-3, 1e12)

    band = Parameter("band", "Hz", "from where to where", (1.0, 1e5), 1e-3, 1e12)
    sigmas = Parameter("sigmas", "", "how many", 3.0, 0.0, 10.0)
    enter("hum", "V/Hz^0.5", _hum, frequency(1e3))
    enter("hum_total", "V", _hum_total, band)
    enter("unlikeness", "V/V", _unlikeness, sigmas, frequency(1e6))
