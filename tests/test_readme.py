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
from optisize.problem.load import load_problem

ROOT = Path(__file__).parents[1]
README = (ROOT / "README.md").read_text(encoding="utf-8")
LEFT_OUT = "…"


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
        if ("resimulate" in line or "--resimulated" in line) and shutil.which("ngspice") is None:
            continue
        result = CliRunner().invoke(app, arguments)
        assert result.exit_code == 0, (line, result.output)
        assert result.stdout.strip(), line
        if line.split()[1] in ("front", "choose", "assess", "spread", "corners"):
            output, shown_lines = tidy(result.stdout), tidy(shown_output(line))
            assert as_shown(output, shown_lines) if LEFT_OUT in shown_lines else output == shown_lines, line


def shown_output(command: str) -> str:
    """Return what the README shows below a command."""
    block = next(b for b in blocks("console") if f"$ {command}\n" in b)
    return block.split(f"$ {command}\n", 1)[1]


def as_shown(output: list[str], shown: list[str]) -> bool:
    """Tell whether lines are those that are shown; an ellipsis stands for any number of them."""
    here = shown.index(LEFT_OUT) if LEFT_OUT in shown else len(shown)
    if output[:here] != shown[:here]:
        return False
    if here == len(shown):
        return len(output) == here
    return any(as_shown(output[i:], shown[here + 1 :]) for i in range(here, len(output) + 1))


def test_an_ellipsis_stands_for_lines_that_are_left_out() -> None:
    assert as_shown(["a", "b"], ["a", "b"])
    assert not as_shown(["a", "b"], ["a"])
    assert not as_shown(["a"], ["a", "b"])
    assert not as_shown(["a", "c"], ["a", "b"])
    for shown in (["…"], ["…", "c", "d"], ["a", "…"], ["a", "…", "c", "…"], ["a", "b", "…", "c", "d"]):
        assert as_shown(["a", "b", "c", "d"], shown)
    for shown in (["…", "c"], ["b", "…"], ["…", "c", "…", "b", "…"], ["a", "…", "e", "…"]):
        assert not as_shown(["a", "b", "c", "d"], shown)


def tidy(text: str) -> list[str]:
    """Return the lines of an output without trailing blanks."""
    return [line.rstrip() for line in text.strip("\n").splitlines()]


def test_the_lines_of_a_problem_fit_into_a_problem(place: Path) -> None:
    problem = (place / "problems" / "thermopile-preamplifier.toml").read_text(encoding="utf-8")
    (lines,) = blocks("toml")
    tables = dict(re.findall(r"\[(\w+)\]\n(.*?)(?=\n\[|\Z)", lines, re.DOTALL))
    problem = problem.replace("[goals]", f"[measures]\n{tables['measures']}\n[goals]\n{tables['goals']}")
    (place / "with-lines.toml").write_text(
        problem.replace("[limits]", f"[limits]\n{tables['limits']}"), encoding="utf-8"
    )
    loaded = load_problem(place / "with-lines.toml")
    assert set(loaded.own_measures) == {"input_noise", "wideband"} <= set(loaded.needed)


def test_the_python_lines_work(place: Path) -> None:
    (code,) = blocks("python")
    script = f"{code}\nassert len(front) >= 100\n"
    subprocess.run([sys.executable, "-c", script], cwd=place, check=True, timeout=120)
    assert (place / "results" / "from-python" / "front.csv").is_file()


def test_other_commands_are_those_that_other_tests_run() -> None:
    """With a model library at hand, by `open_process` and the closed loop."""
    lines = [line for block in blocks("bash") for line in block.replace("\\\n", " ").splitlines()]
    tested = ("optisize process characterise models/all.spice", "optisize search problems/strain-gauge-amplifier.toml")
    assert all(line.startswith(tested) for line in lines)
    assert len(lines) == len(tested)


def test_the_set_up_lines_are_two_and_whole() -> None:
    lines = [line for block in blocks("sh") for line in block.splitlines()]
    assert len(lines) == 2
    assert all(line.startswith("python3 -m venv .venv && .venv/bin/pip install") for line in lines)
    assert "problems/thermopile-preamplifier.toml" in lines[0]
    assert "bin/pytest" in lines[1]
