"""Designs through the simulator: what the run gets, where both part, and what is left of a front."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import time
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from optisize.errors import NothingFeasible
from optisize.front.run import Run, load_run
from optisize.front.table import measured, simulated_column
from optisize.process.law import Array
from optisize.show.resimulation import parting_lines, scatters
from optisize.simulator.resimulate import Comparison, Resimulated, keep_what_holds, tolerance, with_columns
from optisize.stage.measures import CATALOGUE
from tests.conftest import Cli
from tests.problem.test_bad_input import refused
from tests.problem.texts import RESISTOR, SIZING
from tests.simulator.conftest import Pretender

QUICK = ("--population", "16", "--generations", "12", "--quiet")


def pretended(run: Run, **changes: Array) -> Resimulated:
    """Return a re-simulation of a whole front that agrees, but for some measures."""
    numbers = run.front["design"].to_numpy()
    comparisons = []
    for name in run.problem.needed:
        m = run.problem.find(name)
        predicted = measured(run.front, m)
        comparisons.append(Comparison(m, numbers, predicted, changes.get(name, predicted.copy())))
    edges = tuple(("input.p", 0.5) for _ in numbers)
    return Resimulated(run.problem, numbers, tuple(comparisons), {}, {}, edges, "ngspice-0")


def test_a_run_gets_the_simulated_columns(cli: Cli, run_copy: Path, ngspice: str) -> None:
    before = load_run(run_copy)
    (run_copy / "notes.txt").write_text("mine", encoding="utf-8")
    (run_copy / "trade-offs.svg").write_text("a figure", encoding="utf-8")
    result = cli("resimulate", "run", "--sample", "3", "--quiet")
    assert (result.exit_code, result.stderr) == (0, "")
    assert "3 designs of run in ngspice-" in result.stdout
    assert "prediction and simulation agree in every measure" in result.stdout
    assert "area: not simulated, a figure of the layout" in result.stdout
    after = load_run(run_copy)
    pd.testing.assert_frame_equal(after.front[before.front.columns], before.front, check_exact=True)
    added = [c for c in after.front if c not in before.front]
    assert added == [f"simulated {c}" for c in before.front if c in _needed(before) and not c.startswith("area")]
    rows = after.front[after.front["simulated gain [dB]"].notna()]
    assert list(rows["design"]) == [1, 1 + len(before.front) // 2, len(before.front)]
    assert np.abs(rows["simulated gain [dB]"] - rows["gain [dB]"]).max() < 0.01
    assert np.abs(rows["simulated bandwidth [Hz]"] / rows["bandwidth [Hz]"] - 1.0).max() < 0.01
    assert sorted(p.name for p in run_copy.iterdir() if p.suffix in (".png", ".svg", ".txt")) == [
        "notes.txt",
        "resimulation.png",
        "trade-offs.svg",
    ]
    kept = json.loads((run_copy / "run.json").read_text(encoding="utf-8"))["resimulation"]
    assert (kept["designs"], kept["failed"]) == (3, [])
    assert kept["measures"]["gain"]["median"] < 0.01
    assert sorted(p.name for p in Path.cwd().iterdir()) == ["run"]


def _needed(run: Run) -> set[str]:
    return {simulated_column(run.problem.find(n)).removeprefix("simulated ") for n in run.problem.needed}


def test_a_second_time_adds_to_the_columns(cli: Cli, run_copy: Path, ngspice: str) -> None:
    assert cli("resimulate", "run", "--design", "2", "--quiet").exit_code == 0
    assert cli("resimulate", "run", "--design", "3", "--measure", "gain", "--quiet").exit_code == 0
    front = load_run(run_copy).front
    assert list(front.loc[front["simulated gain [dB]"].notna(), "design"]) == [2, 3]
    assert list(front.loc[front["simulated cmrr [dB]"].notna(), "design"]) == [2]
    shown = cli("front", "run", "--where", "simulated gain>=-100 dB").stdout.splitlines()
    assert len(shown) == 4
    assert "simulated gain" in shown[1]
    assert cli("resume", "run", "--generations", "3", "--quiet", "--no-figures").exit_code == 0
    assert not any(c.startswith("simulated") for c in load_run(run_copy).front)


def test_json_holds_both_figures_of_every_measure(cli: Cli, run_copy: Path, ngspice: str) -> None:
    shown = json.loads(cli("resimulate", "run", "--sample", "2", "--measure", "all", "--json", "--quiet").stdout)
    assert len(shown["designs"]) == 2
    assert set(shown["measures"]) | set(shown["not_simulated"]) == set(CATALOGUE)
    gain = shown["measures"]["gain"]
    assert gain["predicted"] == pytest.approx(gain["simulated"], abs=0.01)
    assert gain["parted"] == []


def test_a_sizing_by_hand_is_simulated_without_a_run(cli: Cli, ngspice: str) -> None:
    Path("stage.toml").write_text(RESISTOR, encoding="utf-8")
    Path("hand.toml").write_text(SIZING, encoding="utf-8")
    result = cli("resimulate", "stage.toml", "--sizing", "hand.toml", "--measure", "gain", "--quiet")
    assert result.exit_code == 0
    assert "hand.toml in ngspice-" in result.stdout
    assert sorted(p.name for p in Path.cwd().iterdir()) == ["hand.toml", "stage.toml"]


def test_what_cannot_be_simulated_is_refused(cli: Cli, run_copy: Path, ngspice: str) -> None:
    refused(cli, "--sample", "one of them", words=("resimulate", "run", "--sample", "2", "--design", "1"))
    refused(cli, "--design: found 999", "its designs are 1 to", words=("resimulate", "run", "--design", "999"))
    refused(cli, '"gian"', words=("resimulate", "run", "--measure", "gian"))


def test_one_design_that_fails_leaves_the_others(cli: Cli, run_copy: Path, ngspice: str, pretender: Pretender) -> None:
    code = f"""text = open("deck.sp").read()
if ": design 1 of run" in text.splitlines()[0]:
    print("timestep too small"); sys.exit(1)
os.execv({ngspice!r}, [{ngspice!r}, *sys.argv[1:]])"""
    words = ("resimulate", "run", "--sample", "2", "--simulator", str(pretender(code)), "--quiet")
    result = cli(*words)
    assert result.exit_code == 0
    assert "design 1 did not run: the simulator gave no gain; its last lines:\n  timestep too small" in result.stdout
    front = load_run(run_copy).front
    assert list(front.loc[front["simulated gain [dB]"].notna(), "design"]) == [len(front)]


def test_where_both_part_is_said(finished_run: Path) -> None:
    run = load_run(finished_run)
    gain, bandwidth = run.front["gain [dB]"].to_numpy(), run.front["bandwidth [Hz]"].to_numpy()
    moved, slower = gain.copy(), bandwidth.copy()
    moved[1] += 0.5
    moved[2] = np.nan  # did not run
    slower[:3] *= [1.005, 0.9, 0.8]
    found = pretended(run, gain=moved, bandwidth=slower)
    edges = (*found.edges[:2], ("tail", 0.004), *found.edges[3:])
    lines = parting_lines(replace(found, edges=edges))
    assert lines == [
        "gain parts by more than 0.1 dB: design 2 (+0.5 dB)",
        "bandwidth parts by more than 1 %: design 3 (-20 %; tail is 4 mV inside saturation), 2 (-10 %)",
    ]
    by_name = {c.measure.name: c for c in found.comparisons}
    assert by_name["gain"].worst == 1
    assert by_name["gain"].median == 0.0
    assert by_name["bandwidth"].worst == 2
    shown = {s.label.split(" [")[0]: s for s in scatters(found)}
    assert len(shown["gain"].predicted) == len(gain) - 1
    assert shown["bandwidth"].parted.sum() == 2
    assert "worst -20 %" in shown["bandwidth"].note


def test_an_unlimited_rejection_is_rounding_in_the_simulator() -> None:
    m = CATALOGUE["cmrr"]
    one = Comparison(m, np.arange(3), np.array([np.inf, np.inf, 60.0]), np.array([230.0, 70.0, np.inf]))
    assert list(one.parted) == [False, True, True]
    assert one.worst is None
    assert np.isnan(one.median)
    harmonic = Comparison(CATALOGUE["distortion"], np.arange(2), np.array([-150.0, -90.0]), np.array([-160.0, -100.0]))
    assert list(harmonic.parted) == [False, True]
    assert tolerance(m) == 0.1
    assert tolerance(CATALOGUE["headroom"]) == 5e-3


def test_a_front_keeps_what_holds_in_the_simulator(finished_run: Path) -> None:
    run = load_run(finished_run)
    n = len(run.front)
    assert n >= 6
    bandwidth, gain = run.front["bandwidth [Hz]"].to_numpy().copy(), run.front["gain [dB]"].to_numpy().copy()
    bandwidth[0] = 0.5e6
    gain[2] = -40.0  # and no rejection either
    cmrr = run.front["cmrr [dB]"].to_numpy().copy()
    cmrr[2], current = -40.0, run.front["supply_current [A]"].to_numpy().copy()
    current[2] = 1.0
    found = pretended(run, bandwidth=bandwidth, gain=gain, cmrr=cmrr, supply_current=current)
    kept = keep_what_holds(run, replace(found, failures={2: "no"}))
    assert kept.dropped == {
        1: "bandwidth is 500 kHz",
        2: "the simulator did not solve it",
        3: "another design beats it in the simulator",
    }
    assert kept.shortfalls == {"bandwidth": pytest.approx(0.5)}
    assert list(kept.run.front["design"]) == list(range(1, n - 2))
    np.testing.assert_array_equal(kept.run.front["gain [dB]"], run.front["gain [dB]"][3:])
    np.testing.assert_array_equal(kept.run.front["simulated gain [dB]"], gain[3:])
    with pytest.raises(NothingFeasible, match=r"design 1: bandwidth is 500 kHz\n") as caught:
        keep_what_holds(run, pretended(run, bandwidth=np.full(n, 0.5e6)))
    assert "a margin to these limits leaves room for the difference: bandwidth" in str(caught.value)
    assert f"and {n - 5} more" in str(caught.value)


def test_columns_follow_the_design_numbers(finished_run: Path) -> None:
    run = load_run(finished_run)
    shuffled = run.front.iloc[::-1].reset_index(drop=True)
    found = pretended(run, gain=run.front["design"].to_numpy(dtype=float))
    table = with_columns(shuffled, found)
    np.testing.assert_array_equal(table["simulated gain [dB]"], table["design"])
    assert "simulated gain [dB]" not in shuffled


def test_a_search_ends_with_designs_that_hold_in_the_simulator(cli: Cli, ngspice: str) -> None:
    Path("stage.toml").write_text(RESISTOR, encoding="utf-8")
    result = cli("search", "stage.toml", "--to", "run", "--resimulated", *QUICK)
    assert result.exit_code == 0, result.stderr
    assert "designs hold in the simulator: every limit met, none beaten by another" in result.stdout
    run = load_run("run")
    problem = run.problem
    values = {}
    for name in problem.needed:
        m = problem.find(name)
        heading = simulated_column(m)
        values[name] = run.front[heading].to_numpy() if heading in run.front else measured(run.front, m)
        assert np.isfinite(values[name]).all()
    assessed = problem.judge(values)
    assert (assessed.violation <= 0.0).all()
    for i in range(len(run.front)):
        others = assessed.losses
        beaten = (others <= others[:, [i]]).all(axis=0) & (others < others[:, [i]]).any(axis=0)
        assert not beaten.any()
    info = json.loads(Path("run/run.json").read_text(encoding="utf-8"))
    assert info["designs"] == len(run.front)
    assert info["resimulation"]["designs"] == len(run.front) + len(info["resimulation"]["dropped"])
    assert Path("run/resimulation.png").exists()
    shown = json.loads(cli("search", "stage.toml", "--to", "again", "--resimulated", "--json", *QUICK).stdout)
    assert shown["resimulation"]["measures"]["gain"]["median"] < 0.1
    assert Path("again/front.csv").read_bytes() == Path("run/front.csv").read_bytes()


def test_a_search_of_which_nothing_holds_writes_nothing(cli: Cli, pretender: Pretender) -> None:
    Path("stage.toml").write_text(RESISTOR, encoding="utf-8")
    code = """print("gain = 20 dB\\ncmrr = 60 dB\\nsupply_current = 1e-6 A\\npower = 1e-3 W")
print("output_swing = 1 V\\nheadroom = 0.1 V\\nbandwidth = 2e6 Hz")"""
    words = ("search", "stage.toml", "--to", "run", "--resimulated", "--simulator", str(pretender(code)), *QUICK)
    result = cli(*words)
    assert (result.exit_code, result.stdout) == (3, "")
    assert "nothing feasible in the simulator:\n  design 1: power is 1 mW\n" in result.stderr
    assert not Path("run").exists()


def test_ctrl_c_while_the_front_is_simulated_keeps_the_search(tmp_path: Path, pretender: Pretender) -> None:
    (tmp_path / "stage.toml").write_text(RESISTOR, encoding="utf-8")
    program = pretender("open(os.path.join(os.path.dirname(__file__), 'begun'), 'w').close(); time.sleep(2)")
    words = ["search", "stage.toml", "--to", "run", "--resimulated", "--simulator", str(program), *QUICK]
    process = subprocess.Popen(
        [sys.executable, "-m", "optisize.cli", *words], env={**os.environ, "TMPDIR": str(tmp_path)},
        cwd=tmp_path, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True,
        preexec_fn=lambda: signal.signal(signal.SIGINT, signal.default_int_handler),
    )  # fmt: skip
    for _ in range(400):
        if (tmp_path / "begun").exists():
            break
        time.sleep(0.05)
    process.send_signal(signal.SIGINT)
    _, err = process.communicate(timeout=60)
    assert process.returncode == 130, err
    assert err.splitlines()[-1].endswith("the front is as searched: `optisize resimulate run`")
    assert "Traceback" not in err
    assert not any(c.startswith("simulated") for c in load_run(tmp_path / "run").front)
    assert not list(tmp_path.glob("optisize-*"))
