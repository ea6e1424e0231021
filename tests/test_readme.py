"""Every command and every line of Python that the README shows is run, in the order in which it stands there."""

import re
import shlex
import shutil
import subprocess
import sys
from pathlib import Path

import pytest
from typer.testing import CliRunner

from optisize.cli import app

ROOT = Path(__file__).parents[1]
README = (ROOT / "README.md").read_text(encoding="utf-8")


def blocks(language: str) -> list[str]:
    """Return the code blocks of a language."""
    return re.findall(rf"```{language}\n(.*?)```", README, re.DOTALL)


@pytest.fixture(scope="module")
def place(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with what the repository ships, in which the README's commands are run."""
    folder = tmp_path_factory.mktemp("readme")
    shutil.copytree(ROOT / "problems", folder / "problems")
    shutil.copytree(ROOT / "results" / "sample", folder / "results" / "sample")
    (folder / "my-figures").mkdir()
    return folder


def commands() -> list[str]:
    """Return the commands of the console blocks, without their comments."""
    lines = [line[2:] for block in blocks("console") for line in block.splitlines() if line.startswith("$ ")]
    return [line.split("  #")[0].strip() for line in lines]


def test_every_command_works(place: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(place)
    shown = commands()
    assert len(shown) >= 10
    for line in shown:
        program, *arguments = shlex.split(line)
        assert program == "optisize"
        result = CliRunner().invoke(app, arguments)
        assert result.exit_code == 0, (line, result.output)
        assert result.stdout.strip(), line
        if line.startswith(("optisize front", "optisize assess")):
            assert tidy(result.stdout) == tidy(shown_output(line)), line


def shown_output(command: str) -> str:
    """Return what the README shows below a command."""
    block = next(b for b in blocks("console") if f"$ {command}\n" in b)
    return block.split(f"$ {command}\n", 1)[1]


def tidy(text: str) -> list[str]:
    """Return the lines of an output without trailing blanks."""
    return [line.rstrip() for line in text.strip("\n").splitlines()]


def test_the_python_lines_work(place: Path) -> None:
    (code,) = blocks("python")
    script = f"{code}\nassert len(front) >= 100\n"
    subprocess.run([sys.executable, "-c", script], cwd=place, check=True, timeout=120)
    assert (place / "results" / "from-python" / "front.csv").is_file()


def test_the_set_up_lines_are_two_and_whole() -> None:
    lines = [line for block in blocks("sh") for line in block.splitlines()]
    assert len(lines) == 2
    assert all(line.startswith("python3 -m venv .venv && .venv/bin/pip install") for line in lines)
    assert "problems/thermopile-preamplifier.toml" in lines[0]
    assert "bin/pytest" in lines[1]
