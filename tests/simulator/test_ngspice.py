"""The simulator is found or its absence explained; it runs without a shell; what goes wrong is told in its words."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from optisize.errors import InputError, OptisizeError, SimulationFailed
from optisize.simulator.ngspice import find_simulator, read_raw, run, run_all
from tests.conftest import Cli
from tests.problem.test_bad_input import refused
from tests.simulator.conftest import Pretender

DIVIDER = "* t\nV1 a 0 {volts}\nR1 a b 1k\nR2 b 0 1k\n.control\n{control}\nquit\n.endc\n.end\n"


@pytest.fixture
def nowhere(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    """A machine without a simulator."""
    monkeypatch.delenv("OPTISIZE_NGSPICE", raising=False)
    (tmp_path / "bin").mkdir()
    monkeypatch.setenv("PATH", str(tmp_path / "bin"))


@pytest.mark.usefixtures("nowhere")
def test_without_a_simulator_the_message_says_what_to_install_and_what_is_left() -> None:
    with pytest.raises(OptisizeError, match="apt install ngspice") as caught:
        find_simulator()
    assert caught.value.exit_code == 1
    assert "`optisize deck` still writes decks" in str(caught.value)


@pytest.mark.usefixtures("nowhere")
def test_a_simulator_is_taken_from_the_option_the_variable_or_the_path(
    pretender: Pretender, monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    program = pretender("pass")
    assert find_simulator(program) == program
    monkeypatch.setenv("OPTISIZE_NGSPICE", str(program))
    assert find_simulator() == program
    monkeypatch.setenv("OPTISIZE_NGSPICE", "")
    program.rename(tmp_path / "bin" / "ngspice")
    assert find_simulator() == tmp_path / "bin" / "ngspice"
    with pytest.raises(InputError, match="--simulator: found"):
        find_simulator("no-such-program")


@pytest.mark.usefixtures("nowhere")
def test_commands_without_a_simulator(cli: Cli, run_copy: Path) -> None:
    before = (run_copy / "front.csv").read_bytes()
    for words in (["resimulate", "run"], ["search", "run/problem.toml", "--to", "other", "--resimulated"]):
        result = cli(*words)
        assert (result.exit_code, result.stdout) == (1, "")
        assert "apt install ngspice" in result.stderr
        assert result.stderr.count("\n") == 1
    assert not Path("other").exists()
    assert (run_copy / "front.csv").read_bytes() == before
    assert cli("deck", "run", "--design", "1").exit_code == 0
    refused(cli, "--simulator", "no such program", words=("resimulate", "run", "--simulator", "nospice"))


def test_a_deck_runs_and_its_raw_files_are_read(ngspice: str, tmp_path: Path) -> None:
    control = "set filetype=binary\nset appendwrite\nop\nwrite x.raw all\nac lin 3 1 3\nwrite x.raw all\necho b = $&b"
    deck = DIVIDER.format(volts="dc 2 ac 1", control=control)
    said = run(Path(ngspice), tmp_path, deck, wanted=["x.raw"])
    assert "Doing analysis" in said
    point, response = read_raw(tmp_path / "x.raw")
    assert point["V(B)"] == 1.0
    assert "v(c)" not in point
    np.testing.assert_array_equal(response.stack(["frequency", "v(b)"]), [[1, 2, 3], [0.5, 0.5, 0.5]])
    whole = (tmp_path / "x.raw").read_bytes()
    for cut in (whole[:-5], whole[:40], b"\x00" * 30):
        (tmp_path / "x.raw").write_bytes(cut)
        with pytest.raises(SimulationFailed, match=r"x\.raw"):
            read_raw(tmp_path / "x.raw")


def test_nothing_passes_through_a_shell(pretender: Pretender, tmp_path: Path) -> None:
    folder = tmp_path / "a $(touch hacked) `touch hacked` ; touch hacked"
    folder.mkdir()
    said = run(pretender("print(sys.argv[1:], sorted(os.listdir()))"), folder, "* $(touch hacked)\n.end\n")
    assert said == "['-b', '-n', 'deck.sp'] ['deck.sp']\n"


def test_what_goes_wrong_is_told_with_the_last_lines(pretender: Pretender, tmp_path: Path) -> None:
    for code, expected in (
        ("for i in range(30): print('line', i)", "no x.raw; its last lines:\n  line 18\n"),
        ("print('about to crash', flush=True); os.abort()", "crashed (signal 6); its last lines:\n  about to crash"),
        ("print('slow', flush=True); time.sleep(60)", "stopped after 0.5 s; its last lines:\n  slow"),
        ("pass", "it said nothing"),
        ("print('\\x1b[31mred')", "?[31mred"),
    ):
        with pytest.raises(SimulationFailed) as caught:
            run(pretender(code), tmp_path, "* t\n.end\n", timeout=0.5 if "sleep" in code else 20.0, wanted=["x.raw"])
        assert expected in str(caught.value)
    with pytest.raises(OptisizeError, match="cannot be run"):
        run(tmp_path / "nothing", tmp_path, "* t\n.end\n")


def test_decks_run_side_by_side_in_order_and_one_failure_is_its_own(pretender: Pretender) -> None:
    program = pretender("text = open('deck.sp').read(); print(text); os.abort() if 'bad' in text else 0")
    done: list[int] = []
    folders: list[Path] = []

    def collect(folder: Path, said: str) -> str:
        folders.append(folder)
        return said.strip()

    found = run_all(program, ["one", "bad", "three"], collect, workers=2, watch=done.append)
    assert (found[0], found[2]) == ("one", "three")
    assert isinstance(found[1], SimulationFailed)
    assert done == [1, 2, 3]
    assert not any(folder.exists() for folder in folders)
