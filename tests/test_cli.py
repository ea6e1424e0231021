"""The command line: help, streams, JSON, exit codes, a lazy start, and Ctrl-C."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from typer.testing import CliRunner

import optisize
from optisize.cli import app
from optisize.problem.evaluate import Problem
from optisize.problem.load import load_problem
from tests.conftest import Cli
from tests.problem.test_bad_input import refused
from tests.problem.texts import RESISTOR, SIZING, changed

COMMANDS = (
    "search",
    "resume",
    "front",
    "assess",
    "plot",
    "choose",
    "compare",
    "page",
    "spread",
    "corners",
    "sheet",
    "deck",
    "resimulate",
    "measures",
    "schema",
    "new",
    "process list",
    "process show",
    "process characterise",
)
COMMAND = Path(sys.executable).with_name("optisize")
QUICK = ("--population", "40", "--generations", "21", "--no-figures")


def _python(*words: str, cwd: Path | None = None, **options: object) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, *words], cwd=cwd, capture_output=True, text=True, check=False, **options  # type: ignore[call-overload]
    )  # fmt: skip


@pytest.mark.parametrize("command", COMMANDS)
@pytest.mark.parametrize("flag", ["--help", "-h"])
def test_every_command_has_help_with_an_example(cli: Cli, command: str, flag: str) -> None:
    result = cli(*command.split(), flag)
    assert result.exit_code == 0
    assert result.stderr == ""
    text = " ".join(result.stdout.split())
    assert f"Example: optisize {command}" in text
    assert text.index("Usage: ") < text.index("Options") < text.index("Example:")


def test_the_list_of_commands_is_that_of_the_tests(cli: Cli) -> None:
    names = {c.name or c.callback.__name__ for c in app.registered_commands if c.callback}
    assert names | {"process list", "process show", "process characterise"} == set(COMMANDS)
    shown = cli("--help").stdout
    assert all(name.split()[0] in shown for name in COMMANDS)
    assert cli("--version").stdout == f"optisize {optisize.__version__}\n"


def test_help_starts_without_the_heavy_packages(tmp_path: Path) -> None:
    for words in (["--help"], ["search", "--help"], ["--version"], ["front", "-h"]):
        result = _python("-X", "importtime", "-m", "optisize.cli", *words, cwd=tmp_path)
        assert result.returncode == 0, result.stderr
        loaded = {line.rsplit("|", 1)[1].strip().split(".")[0] for line in result.stderr.splitlines() if "|" in line}
        assert "typer" in loaded
        assert not loaded & {"pymoo", "pandas", "matplotlib", "scipy", "moocore", "numpy", "bokeh"}


def test_light_commands_leave_the_heaviest_packages_alone(tmp_path: Path) -> None:
    code = (
        "import sys; from optisize.cli import app\n"
        "try: app(['new', 'stage'])\nexcept SystemExit as e: assert not e.code\n"
        "assert not {'pymoo', 'pandas', 'matplotlib'} & set(sys.modules), set(sys.modules)"
    )
    assert _python("-c", code, cwd=tmp_path).returncode == 0


@pytest.mark.skipif(not COMMAND.exists(), reason="the command is not installed beside this Python")
def test_shell_completion_works() -> None:
    def answer(**variables: str) -> str:
        options = {"capture_output": True, "text": True, "check": True}
        return subprocess.run([COMMAND], env={**os.environ, **variables}, **options).stdout  # type: ignore[call-overload]

    for shell in ("bash", "zsh", "fish"):
        assert "_OPTISIZE_COMPLETE=complete_" in answer(_OPTISIZE_COMPLETE=f"source_{shell}")
    words = {"_OPTISIZE_COMPLETE": "complete_bash"}
    assert answer(COMP_WORDS="optisize fr", COMP_CWORD="1", **words).split() == ["front"]
    assert answer(COMP_WORDS="optisize search --po", COMP_CWORD="2", **words).split() == ["--population"]
    assert answer(COMP_WORDS="optisize process s", COMP_CWORD="2", **words).split() == ["show"]


def test_results_go_to_stdout_and_progress_to_stderr(cli: Cli, monkeypatch: pytest.MonkeyPatch) -> None:
    Path("stage.toml").write_text(RESISTOR, encoding="utf-8")
    monkeypatch.setattr(time, "monotonic", iter(range(0, 100_000, 5)).__next__)  # always time for another line
    result = cli("search", "stage.toml", "--to", "run", *QUICK)
    assert result.exit_code == 0
    assert "generation " not in result.stdout
    assert [line.split()[:2] for line in result.stderr.splitlines()] == [
        ["generation", "1/21"],
        ["generation", "21/21"],
    ]
    for words in ("best", "supply_current", "designs on the front", "run: run", "not a sign-off"):
        assert words in result.stdout
    quiet = cli("search", "stage.toml", "--to", "other", "--quiet", *QUICK)
    assert quiet.stderr == ""


def test_a_search_in_json_has_its_keys_and_nothing_else_on_stdout(cli: Cli) -> None:
    Path("stage.toml").write_text(RESISTOR, encoding="utf-8")
    result = cli("search", "stage.toml", "--json", *QUICK)
    shown = json.loads(result.stdout)
    assert shown["run"] == "results/stage"
    assert {"run", "designs", "evaluations", "hypervolume", "seconds"} <= set(shown)
    assert shown["designs"] == len(pd.read_csv("results/stage/front.csv"))
    assert shown["evaluations"] == 40 * 21
    info = json.loads(Path("results/stage/run.json").read_text(encoding="utf-8"))
    assert shown["hypervolume"] == info["hypervolume"]
    refused(cli, "results/stage", "already exists", words=("search", "stage.toml"))


@pytest.mark.parametrize("command", ["measures", "process list", "process show handbook", "schema", "schema process"])
def test_json_is_json(cli: Cli, command: str) -> None:
    words = command.split() if "schema" in command else [*command.split(), "--json"]
    result = cli(*words)
    assert result.exit_code == 0
    assert json.loads(result.stdout)


def test_options_take_the_place_of_the_problem_s(cli: Cli) -> None:
    Path("stage.toml").write_text(RESISTOR, encoding="utf-8")
    cli("search", "stage.toml", "--to", "run", "--seed", "7", *QUICK, "--quiet")
    info = json.loads(Path("run/run.json").read_text(encoding="utf-8"))
    assert (info["seed"], info["population"], info["generations"]) == (7, 40, 21)
    for words in (["--seed", "-1"], ["--population", "7"], ["--generations", "0"], ["--threads", "0"], ["--seed", "x"]):
        result = cli("search", "stage.toml", "--to", "no", *words)
        assert result.exit_code == 2
        assert words[0] in result.stderr
        assert not Path("no").exists()


def test_a_measure_at_two_frequencies_goes_from_the_problem_to_the_figures(cli: Cli) -> None:
    table = """[measures]
input_noise = { frequency = "10 Hz" }
wideband = { of = "input_noise", frequency = "100 kHz" }
[goals]"""
    text = changed(RESISTOR, ("[goals]", table), ("cmrr", 'wideband = "min"'))
    text = changed(text, ("power", 'input_noise = { max = "20 uV/√Hz" }'))
    Path("stage.toml").write_text(text, encoding="utf-8")
    Path("hand.toml").write_text(SIZING, encoding="utf-8")
    shown = cli("search", "stage.toml", "--to", "run", *QUICK, "--quiet")
    assert shown.exit_code == 0, shown.stderr
    assert "wideband (min)" in shown.stdout
    front = pd.read_csv("run/front.csv")
    wideband, slow = front["wideband [V/Hz^0.5]"], front["input_noise [V/Hz^0.5]"]
    assert ((wideband > 0) & (wideband < slow) & (slow <= 20e-6 * (1 + 1e-9))).all()
    bound = float(np.median(wideband) * 1e9)
    chosen = cli("front", "run", "--sort", "wideband", "--where", f"wideband<={bound} nV/√Hz", "--csv")
    assert 0 < len(chosen.stdout.splitlines()) - 1 < len(front)
    own = json.loads(cli("assess", "stage.toml", "hand.toml", "--json").stdout)["measures"]
    assert 0 < own["wideband"] < own["input_noise"]
    words = cli("assess", "stage.toml", "hand.toml").stdout
    assert "wideband (input_noise at 100 kHz)" in words
    assert "input_noise (at 10 Hz)" in words
    drawn = cli("plot", "run", "--format", "svg")
    assert (drawn.exit_code, drawn.stderr) == (0, "")
    assert cli("resume", "run", "--no-figures", "--quiet").exit_code == 0


def test_words_that_are_no_command_or_option_are_refused(cli: Cli) -> None:
    assert "Did you mean 'search'" in cli("serch").stderr
    for words in (["serch"], ["search"], ["search", "--popluation", "3"], ["front", "a", "b"]):
        result = cli(*words)
        assert (result.exit_code, result.stdout) == (2, "")
    refused(cli, '"probem"', '"problem"?', words=("schema", "probem"))


def test_nothing_feasible_exits_3_and_writes_nothing(cli: Cli) -> None:
    text = changed(RESISTOR, ("bandwidth", 'bandwidth = { min = "1 GHz" }'))
    Path("stage.toml").write_text(text, encoding="utf-8")
    result = cli("search", "stage.toml", "--to", "run", "--quiet", *QUICK)
    assert (result.exit_code, result.stdout) == (3, "")
    assert "nothing feasible" in result.stderr
    assert "bandwidth: min 1 GHz wanted, nearest design has" in result.stderr
    assert [p.name for p in Path.cwd().iterdir()] == ["stage.toml"]


def test_debug_shows_the_traceback_and_nothing_else_does(tmp_path: Path) -> None:
    plain = _python("-m", "optisize.cli", "front", "nowhere", cwd=tmp_path)
    debug = _python("-m", "optisize.cli", "--debug", "front", "nowhere", cwd=tmp_path)
    assert plain.returncode == 2
    assert plain.stderr == "optisize: nowhere: there is no such run\n"
    assert debug.returncode != 0
    assert "Traceback" in debug.stderr
    assert "InputError" in debug.stderr


def test_a_defect_of_the_package_is_one_message_too(cli: Cli, run_copy: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def broken(*_: object) -> None:
        raise ZeroDivisionError("a\nb")

    monkeypatch.setattr("optisize.show.terminal.print_front", broken)
    result = cli("front", "run")
    assert result.exit_code == 1
    assert result.stderr == "optisize: internal error: ZeroDivisionError: a b (optisize --debug … shows where)\n"


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="there is no /dev/full")
@pytest.mark.parametrize("command", ["measures", "schema", "front run --csv"])
def test_a_full_device_on_stdout_is_one_message(finished_run: Path, command: str) -> None:
    with Path("/dev/full").open("w") as full:
        result = subprocess.run(
            [sys.executable, "-m", "optisize.cli", *command.split()],
            cwd=finished_run.parent, stdout=full, stderr=subprocess.PIPE, text=True, check=False,
        )  # fmt: skip
    assert result.returncode == 1
    assert result.stderr == "optisize: output: No space left on device\n"


def test_a_reader_that_stops_reading_causes_no_noise(finished_run: Path) -> None:
    code = f"{sys.executable} -m optisize.cli front run --json | head -n 1"
    result = subprocess.run(code, shell=True, cwd=finished_run.parent, capture_output=True, text=True, check=False)
    assert (result.stdout, result.stderr) == ("[\n", "")


def test_a_new_problem_can_be_searched(cli: Cli) -> None:
    result = cli("new", "my-stage")
    assert result.exit_code == 0
    assert "optisize search my-stage.toml" in result.stdout
    result = cli("search", "my-stage.toml", "--population", "200", "--generations", "9", "--no-figures", "--quiet")
    assert result.exit_code == 0, result.stderr
    assert Path("results/my-stage/front.csv").exists()
    before = Path("my-stage.toml").read_bytes()
    refused(cli, "my-stage.toml: already exists", words=("new", "my-stage"))
    assert Path("my-stage.toml").read_bytes() == before


def test_the_measures_of_a_new_problem_need_no_more_than_their_comment_marks_taken_away(cli: Cli) -> None:
    cli("new", "my-stage")
    path = Path("my-stage.toml")
    text = path.read_text(encoding="utf-8")
    begin = text.index("# [measures]")
    end = text.index("\n\n", begin)
    block = text[begin:end].replace("\n# ", "\n").removeprefix("# ")
    path.write_text(text[:begin] + block + text[end:], encoding="utf-8")
    assert {name: m.taken_at for name, m in load_problem(path).own_measures.items()} == {
        "input_noise": {"frequency": 10.0},
        "wideband": {"frequency": 1e5},
    }


@pytest.mark.parametrize("name", ["a b", "{title}", "ΩΩ", 'it\'s "quoted" \\ [red]', "x" * 220, "a.toml", "$x$", "-"])
def test_a_new_problem_of_any_name_loads(cli: Cli, name: str) -> None:
    result = cli("new", "--", name)
    assert result.exit_code == 0, result.stderr
    [path] = Path.cwd().iterdir()
    assert path.name == (name if name.endswith(".toml") else f"{name}.toml")
    assert isinstance(load_problem(path), Problem)


def test_a_new_problem_without_a_place_is_refused(cli: Cli) -> None:
    refused(cli, "nowhere: there is no such directory", words=("new", "nowhere/stage"))
    for name in ("", "/", "./"):
        refused(cli, "NAME", "my-stage", words=("new", name))


def test_a_search_starts_from_a_sizing_file(cli: Cli) -> None:
    Path("stage.toml").write_text(RESISTOR, encoding="utf-8")
    Path("hand.toml").write_text(SIZING, encoding="utf-8")
    result = cli("search", "stage.toml", "--to", "run", "--from", "hand.toml", "--quiet", *QUICK)
    assert result.exit_code == 0, result.stderr
    refused(cli, "nowhere.toml", "no such file", words=("search", "stage.toml", "--from", "nowhere.toml"))


def test_the_front_file_is_the_same_with_one_thread_and_with_two(cli: Cli) -> None:
    text = changed(RESISTOR, ("population", "population = 400"), ("generations", "generations = 9"))
    Path("stage.toml").write_text(text, encoding="utf-8")
    for threads in ("1", "2"):
        words = ("search", "stage.toml", "--to", f"run{threads}", "--threads", threads, "--no-figures", "--quiet")
        assert cli(*words).exit_code == 0
    assert Path("run1/front.csv").read_bytes() == Path("run2/front.csv").read_bytes()
    assert Path("run1/history.csv").read_bytes() == Path("run2/history.csv").read_bytes()


def test_a_finished_run_is_resumed_into_its_place_or_another(cli: Cli, run_copy: Path) -> None:
    (run_copy / "notes.txt").write_text("mine", encoding="utf-8")
    other = cli("resume", "run", "--to", "other", "--no-figures", "--quiet")
    assert other.exit_code == 0, other.stderr
    (run_copy / "sheet-7.pdf").write_text("of an old design", encoding="utf-8")
    again = cli("resume", "run", "--no-figures", "--quiet")
    assert again.exit_code == 0
    assert "numbered anew, so these of the old front are gone: sheet-7.pdf" in again.stderr
    assert not (run_copy / "sheet-7.pdf").exists()
    assert Path("run/front.csv").read_bytes() == Path("other/front.csv").read_bytes()
    assert Path("run/notes.txt").read_text(encoding="utf-8") == "mine"
    assert sorted(p.name for p in Path.cwd().iterdir()) == ["other", "run"]
    refused(cli, "other", "already exists", words=("resume", "run", "--to", "other"))


def _interrupted_search(directory: Path, *words: str) -> tuple[int, str, str]:
    """Search without end in a process of its own and press Ctrl-C when it reports for the first time."""
    options = ["search", "stage.toml", "--to", "run", "--generations", "1000000", *words]
    process = subprocess.Popen(
        [sys.executable, "-m", "optisize.cli", *options],
        cwd=directory, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True,
        preexec_fn=lambda: signal.signal(signal.SIGINT, signal.default_int_handler),
    )  # fmt: skip
    assert process.stderr is not None
    first = process.stderr.readline()
    for _ in range(20):  # an impatient hand
        process.send_signal(signal.SIGINT)
        time.sleep(0.01)
    out, err = process.communicate(timeout=60)
    return process.returncode, out, first + err


def test_ctrl_c_leaves_a_run_that_goes_on_bit_for_bit(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    Path("stage.toml").write_text(changed(RESISTOR, ("seed", "seed = 1\npatience = 0")), encoding="utf-8")
    code, out, err = _interrupted_search(tmp_path, "--population", "40", "--json")
    assert code == 130, err
    assert "Traceback" not in err
    assert err.splitlines()[-1] == "optisize: interrupted; `optisize resume run` goes on"
    shown = json.loads(out)
    assert shown["stopped"] == "interrupted"
    assert sorted(p.name for p in tmp_path.iterdir()) == ["run", "stage.toml"]
    with np.load("run/checkpoint.npz", allow_pickle=False) as checkpoint:
        assert all(checkpoint[name].dtype != object for name in checkpoint.files)
    runner, total = CliRunner(), str(shown["generations"] + 33)
    assert runner.invoke(app, ["front", "run"]).exit_code == 0
    words = ["--generations", total, "--quiet", "--no-figures"]
    assert runner.invoke(app, ["resume", "run", *words]).exit_code == 0
    assert runner.invoke(app, ["search", "stage.toml", "--to", "whole", "--population", "40", *words]).exit_code == 0
    assert Path("run/front.csv").read_bytes() == Path("whole/front.csv").read_bytes()
    assert Path("run/history.csv").read_bytes() == Path("whole/history.csv").read_bytes()
    assert not Path("run/checkpoint.npz").exists()


def test_ctrl_c_before_there_is_anything_to_keep_leaves_nothing(cli: Cli, monkeypatch: pytest.MonkeyPatch) -> None:
    def interrupt(*_: object, **__: object) -> None:
        raise KeyboardInterrupt

    Path("stage.toml").write_text(RESISTOR, encoding="utf-8")
    monkeypatch.setattr("optisize.front.explore.survey", interrupt)
    result = cli("search", "stage.toml", "--to", "run", "--quiet")
    assert (result.exit_code, result.stdout, result.stderr) == (130, "", "optisize: interrupted\n")
    assert [p.name for p in Path.cwd().iterdir()] == ["stage.toml"]


@pytest.mark.parametrize(
    "words",
    [
        "--load source --form telescopic",
        "--load source --tail cascode",
        "--input pmos --load diode --tail resistor --output differential",
        "--load mirror --form telescopic",
        "--tail ideal",
    ],
)
def test_a_new_problem_has_every_size_of_its_stage(cli: Cli, words: str) -> None:
    assert cli("new", "kind", *words.split()).exit_code == 0
    longer = ("--population", "100", "--generations", "40", "--no-figures")
    assert cli("search", "kind.toml", "--to", "run", *longer).exit_code == 0


def test_a_new_problem_of_no_stage_is_refused(cli: Cli) -> None:
    result = cli("new", "kind", "--load", "sourse")
    assert result.exit_code == 2
    assert result.stderr == (
        'optisize: --load: found "sourse"; allowed are resistor, diode, mirror, source; did you mean "source"?\n'
    )
    result = cli("new", "kind", "--load", "mirror", "--output", "differential")
    assert result.exit_code == 2
    assert "a mirror has one output" in result.stderr
    assert not Path("kind.toml").exists()
