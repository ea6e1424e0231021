"""Decks of every kind and law: they run without a warning, agree with the package, and no name adds a line to them."""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np
import pytest

from optisize.errors import SimulationFailed
from optisize.problem.evaluate import Problem
from optisize.problem.load import load_problem
from optisize.simulator import deck as deck_module
from optisize.simulator.bench import BENCHES, NOT_SIMULATED, no_bench
from optisize.simulator.deck import benched, write_deck
from optisize.simulator.ngspice import run
from optisize.simulator.resimulate import Comparison
from optisize.stage.analysis import Analysis
from optisize.stage.measures import CATALOGUE
from tests.conftest import Cli
from tests.problem.test_bad_input import refused
from tests.problem.texts import RESISTOR, SIZING, changed
from tests.reference.samples import DEGENERATED, EVERY_KIND, SOURCE_TIED, Kind
from tests.simulator.decks import differences, problem_of, simulated, sizing

KINDS = EVERY_KIND + SOURCE_TIED + DEGENERATED
EVERYDAY = (
    "gain", "common_mode_gain", "cmrr", "supply_rejection", "supply_current", "power", "headroom", "output_swing",
    "bandwidth", "unity_gain_frequency", "input_noise", "output_resistance", "input_capacitance", "input.p.id",
    "tail.vdsat",
)  # fmt: skip
WHOLE = [
    (Kind("nmos", "mirror", "single"), "handbook"),
    (Kind("pmos", "source", "cascode", "differential"), "handbook"),
    (Kind("nmos", "resistor", "single", "differential"), "generic-65"),
]
RESOLVED = -130.0  # dB; a distortion below it is at the rounding of the simulator


def assert_agrees(kind: Kind, process: str, found: dict[str, tuple[float, float]], problem: Problem) -> None:
    """Hold every measure within the bounds of the checks of the kernel."""
    for name, (predicted, value) in found.items():
        measure = problem.find(name)
        if name == "distortion" and predicted < RESOLVED:
            continue
        c = Comparison(measure, np.array([1]), np.array([predicted]), np.array([value]))
        small = abs(value - predicted) < 5e-3 and measure.unit == "V" and measure.scale == "log" and "noise" not in name
        assert small or not c.parted[0], (str(kind), process, name, predicted, value)


@pytest.mark.parametrize("kind", KINDS, ids=str)
def test_square_decks_of_every_kind(kind: Kind, ngspice: str, tmp_path: Path) -> None:
    names = [x for x in EVERYDAY if not x.startswith("tail") or kind.tail in ("single", "cascode")]
    s = simulated(ngspice, tmp_path, kind, "handbook", names)
    assert s.warnings == []
    found = differences(s)
    assert len(found) >= len(names) - 3  # an ideal tail rejects without limit
    assert_agrees(kind, "handbook", found, problem_of(kind, "handbook"))


@pytest.mark.parametrize("kind", KINDS[1::4], ids=str)
def test_charge_decks_of_a_quarter_of_the_kinds(kind: Kind, ngspice: str, tmp_path: Path) -> None:
    names = ["gain", "cmrr", "supply_current", "headroom", "output_swing", "bandwidth", "input_noise"]
    s = simulated(ngspice, tmp_path, kind, "generic-180", names)
    assert s.warnings == []
    assert_agrees(kind, "generic-180", differences(s), problem_of(kind, "generic-180"))


@pytest.mark.parametrize(("kind", "process"), WHOLE, ids=str)
def test_every_measure_of_the_catalogue(kind: Kind, process: str, ngspice: str, tmp_path: Path) -> None:
    s = simulated(ngspice, tmp_path, kind, process, ["all"])
    assert s.warnings == []
    assert {m.name for m in s.deck.measures} | set(s.deck.left_out) == set(CATALOGUE)
    assert_agrees(kind, process, differences(s), problem_of(kind, process))


def test_another_temperature_and_corner(ngspice: str, tmp_path: Path) -> None:
    for process in ("handbook", "generic-180"):
        where = {"temperature": 358.15, "corner": "slow"}
        kind = Kind("pmos", "resistor", "single")
        s = simulated(ngspice, tmp_path, kind, process, ["gain", "supply_current", "bandwidth", "input_noise"], **where)
        assert s.warnings == []
        assert len(differences(s)) == 4
        assert_agrees(kind, process, differences(s), problem_of(kind, process, **where))


def test_a_wanted_output_has_an_offset(ngspice: str, tmp_path: Path) -> None:
    kind = Kind("nmos", "mirror", "single")
    s = simulated(ngspice, tmp_path, kind, "handbook", ["offset_systematic"], output_common_mode=2.2)
    assert s.warnings == []
    predicted, value = differences(s)["offset_systematic"]
    assert value == pytest.approx(predicted, abs=1e-6)
    assert abs(value) > 1e-4


def test_every_measure_has_a_bench_or_a_reason() -> None:
    assert not set(BENCHES) & set(NOT_SIMULATED)
    assert set(BENCHES) | set(NOT_SIMULATED) == set(CATALOGUE)
    kind = Kind("nmos", "resistor", "single")
    problem = problem_of(kind, "handbook")
    a = Analysis(problem.circuit(sizing(kind, "handbook")))
    assert "by its definition" in no_bench(problem.find("offset_systematic"), a)
    assert no_bench(problem.find("input.p.gm"), a) == "has no bench"
    assert no_bench(problem.find("input.p.vgs"), a) == ""


HOSTILE = (
    "x\n.shell touch hacked",
    "a title\r.control\rshell touch hacked\r.endc",
    'say "hello" $(touch hacked) `touch hacked`',
    ".include /etc/passwd",
    "*ng_script",
    "line\u2028.end\u0085.end",
    "{1/0} \\n.end ; & | @m1[gm]",
)


def text_of(title: str) -> str:
    """Return a problem file with a title as TOML writes it."""
    import json

    return changed(RESISTOR, ("title", f"title = {json.dumps(title)}"))


@pytest.mark.parametrize("title", HOSTILE)
def test_no_title_or_name_adds_a_line(
    title: str, ngspice: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    plain, hostile = tmp_path / "plain.toml", tmp_path / "stage $(touch hacked)\n.end.toml"
    plain.write_text(RESISTOR, encoding="utf-8")
    hostile.write_text(text_of(title), encoding="utf-8")
    decks = []
    for path in (plain, hostile):
        problem = load_problem(path)
        middle = {k: v[:1] for k, v in problem.space.decode(np.full((problem.space.dimensions, 1), 0.5)).items()}
        decks.append(write_deck(problem, middle, f"design 1 of {title}", benched(problem)))
    lines = [[line for line in d.text.splitlines() if not line.startswith("*")] for d in decks]
    assert lines[0] == lines[1]
    assert decks[1].text.isascii()
    said = run(Path(ngspice), tmp_path, decks[1].text)
    assert len(decks[1].read(said)) == len(decks[1].measures)
    assert not (tmp_path / "hacked").exists()


def test_a_deck_is_for_a_person_too(finished_run: Path) -> None:
    from optisize.front.pick import pick

    picked = pick(finished_run, 1)
    text = write_deck(picked.problem, picked.sizes, picked.label, benched(picked.problem)).text
    width = float(picked.sizes["input.width"][0]) * 1e6
    assert f"Xinput_p left inp tail vss charge_n w={width:g}u" in text
    assert re.search(r"^Ibias vdd bias dc [\d.]+[nu]$", text, re.MULTILINE)
    assert ".subckt stage inp inn out vdd vss" in text
    assert "* gain: predicted " in text
    for words in ("sha256", "not a sign-off", "supply 1.8 V", "corner typical", "not simulated: area", "optisize 0."):
        assert words in text
    assert max(len(line) for line in text.splitlines()) < 200


def test_what_is_missing_in_the_output_is_told_with_the_last_lines(ngspice: str, tmp_path: Path) -> None:
    s = simulated(ngspice, tmp_path, Kind("nmos", "mirror", "ideal"), "handbook", ["gain", "cmrr"])
    assert s.deck.read("gain = 20.5 dB\ncmrr = unlimited dB\n") == {"gain": 20.5, "cmrr": np.inf}
    for said in ("gain = 20.5 dB\n", "gain = 20.5 dB\ncmrr =  dB\nthe end", "gain = 20.5 dB\ncmrr = nan dB\n", ""):
        with pytest.raises(SimulationFailed, match="gave no cmrr" if said else "gave no gain"):
            s.deck.read(said)


def test_a_deck_that_does_not_converge(cli: Cli, run_copy: Path, ngspice: str, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(deck_module, "TOLERANCES", "reltol=1e-7\nVone odd 0 1\nVtwo odd 0 2\n.options")
    before = {p.name: p.read_bytes() for p in run_copy.iterdir()}
    for words in (["resimulate", "run", "--design", "1"], ["resimulate", "run", "--sample", "3"]):
        result = cli(*words, "--quiet")
        assert (result.exit_code, result.stdout) == (1, "")
        assert "optisize: design 1: the simulator gave no gain; its last lines:\n" in result.stderr
        assert result.stderr.count("\n") > 3
        assert "Traceback" not in result.stderr
    assert {p.name: p.read_bytes() for p in run_copy.iterdir()} == before


def test_decks_go_to_stdout_a_file_or_a_directory(cli: Cli, run_copy: Path) -> None:
    shown = cli("deck", "run", "--design", "2")
    assert shown.exit_code == 0
    assert shown.stdout.startswith("* a stage with resistors: design 2 of run\n")
    assert shown.stdout.endswith(".end\n")
    assert cli("deck", "run", "--design", "2", "--to", "stage.sp").exit_code == 0
    assert Path("stage.sp").read_text(encoding="utf-8") == shown.stdout
    refused(cli, "stage.sp: already exists", words=("deck", "run", "--design", "2", "--to", "stage.sp"))
    Path("place").mkdir()
    cli("deck", "run", "--design", "2", "--to", "place", "--measure", "gain", "--measure", "input_noise")
    text = Path("place/design-2.sp").read_text(encoding="utf-8")
    assert 'echo "input_noise = ' in text
    assert 'echo "bandwidth = ' not in text
    result = cli("deck", "run", "--all", "--to", "decks")
    assert result.exit_code == 0
    count = len((run_copy / "front.csv").read_text(encoding="utf-8").splitlines()) - 1
    assert result.stdout == f"decks: {count} decks\n"
    assert sorted(p.name for p in Path("decks").iterdir()) == sorted(f"design-{k}.sp" for k in range(1, count + 1))
    refused(cli, "decks: already exists", words=("deck", "run", "--all", "--to", "decks"))
    assert sorted(p.name for p in Path.cwd().iterdir()) == ["decks", "place", "run", "stage.sp"]


def test_a_deck_of_a_sizing_by_hand(cli: Cli) -> None:
    Path("stage.toml").write_text(RESISTOR, encoding="utf-8")
    Path("hand.toml").write_text(SIZING, encoding="utf-8")
    result = cli("deck", "stage.toml", "--sizing", "hand.toml", "--measure", "all")
    assert result.exit_code == 0
    assert result.stdout.startswith("* a stage with resistors: hand.toml\n")
    assert 'echo "distortion = ' in result.stdout


def test_what_is_no_deck_is_refused(cli: Cli, run_copy: Path) -> None:
    refused(cli, "--all", "--to decks", words=("deck", "run", "--all"))
    refused(cli, "--all", "one of them", words=("deck", "run", "--all", "--design", "1", "--to", "x"))
    refused(cli, '"gian"', 'mean "gain"', words=("deck", "run", "--design", "1", "--measure", "gian"))
    refused(cli, "no such design", words=("deck", "run", "--design", "9999"))
    assert not Path("x").exists()
    result = cli("deck", "run", "--all", "--to", "run/front.csv/decks")
    assert result.exit_code == 1
    assert "cannot be written" in result.stderr
