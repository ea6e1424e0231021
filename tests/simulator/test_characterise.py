"""From a library to a process: a small library of level-1 transistors against the square law, and what can go wrong.

Bounds are those of the table law; messages are common practice, no source.
"""

from __future__ import annotations

import json
import shutil
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from optisize.process.card import BOLTZMANN, load_process
from optisize.process.law import Array
from optisize.process.tabulated import read_tables
from tests.conftest import Cli, call
from tests.process.tables import LENGTHS, NOMINAL, WIDTHS, sampled_process
from tests.simulator.conftest import Pretender
from tests.simulator.libraries import SIZES, write_library

DEVICES = ("--init", "start", "--section", "tt", "--nmos", "nch", "--pmos", "pch", "--supply", "2 V")


@pytest.fixture(scope="module")
def made(ngspice: str, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The process file of the library at two corners and two temperatures."""
    place = tmp_path_factory.mktemp("made")
    words = ["process", "characterise", str(write_library(place)), *DEVICES, *SIZES, "--corner", "slow=ss", "--quiet"]
    words += ["--temperature", "27 degC", "--temperature", "60 degC", "--to", str(place / "mine.toml")]
    result = call(*words)
    assert result.exit_code == 0, result.stderr
    assert result.stderr == ""
    assert sorted(p.name for p in place.iterdir()) == ["all.lib", "mine.nc", "mine.toml", "more.lib", "parts.lib"]
    return place / "mine.toml"


def square(vg: Array, vd: Array, vs: Array, width: float, length: float, vto: float = 0.6) -> Array:
    """Return the current of the library's n-channel transistor, of Shichman and Hodges."""
    vov = np.maximum(vg - vs - vto - 0.5 * (np.sqrt(0.8 + vs) - np.sqrt(0.8)), 0.0)
    vds = vd - vs
    x = np.minimum(vds, vov)
    return 150e-6 * width / length * (vov * x - 0.5 * x * x) * (1.0 + 0.05 * vds)


def points(count: int = 400) -> tuple[Array, Array, Array]:
    rng = np.random.default_rng(4)
    vs = rng.uniform(0.0, 0.5, (1, count))
    return vs + rng.uniform(1.0, 1.5, vs.shape), vs + rng.uniform(0.7, 1.4, vs.shape), vs


def test_currents_and_the_process_file(made: Path) -> None:
    process = load_process(made)
    assert process.law == "table"
    assert process.tables is not None
    assert process.library is not None
    assert process.corner_names == ("typical", "slow")
    assert [str(c) for c in process.tables.conditions] == [
        f"{corner} at {celsius} degC" for corner in ("typical", "slow") for celsius in (27, 60)
    ]
    assert process.library.path == made.parent / "all.lib"
    assert process.library.sections == {"typical": "tt", "slow": "ss"}
    assert (process.library.nmos.inner, process.library.pmos.inner) == ("m0", "mcore")
    assert process.library.pmos.terminals == "gsdb"
    assert process.nmos.threshold_matching == pytest.approx(7.5e-9)
    assert process.tables.attributes["library_sha256"] == process.library.sha256
    v = points()
    for corner, vto in (("typical", 0.6), ("slow", 0.7)):
        law, _ = process.bind_law(["n"], np.full((1, 400), 8e-6), np.full((1, 400), 1e-6), NOMINAL, corner)
        # A level-1 transistor has no weak inversion, and a kink in its slopes at vdsat.
        wanted = square(*v, 8e-6, 1e-6, vto)
        error = np.abs(law.drain(*v).id / wanted - 1.0)
        assert np.percentile(error, 95.0) < 0.01
        overdrive = law.saturation(*v).vdsat - (v[0] - v[2] - vto - 0.5 * (np.sqrt(0.8 + v[2]) - np.sqrt(0.8)))
        assert np.percentile(np.abs(overdrive), 95.0) < 0.01


def test_capacitances_junctions_and_noise(made: Path) -> None:
    """Overlaps 0.3 fF/um; the depletion formulas of the junctions; 4 k T (2/3) gm of level 1."""
    process = load_process(made)
    shape = np.full((1, 400), 10e-6), np.full((1, 400), 4e-6)
    law, parameters = process.bind_law(["n"], *shape, NOMINAL, "typical")
    v = points()
    oxide = 3.9 * 8.854214871e-12 / 7.5e-9 * 40e-12
    c = law.capacitances(*v)
    saturated = v[1] - v[2] > law.saturation(*v).vdsat + 0.2
    assert saturated.sum() > 20
    whole = 2.0 / 3.0 * oxide + 6e-15
    for got, wanted in ((c.cgd, 3e-15), (c.cgs, 2.0 / 3.0 * oxide + 3e-15)):
        assert np.percentile(np.abs(got[saturated] - wanted) / whole, 95.0) < 0.04
    reverse = np.full((1, 400), 1.1)
    area, edge = np.full((1, 400), 2e-12), np.full((1, 400), 5e-6)
    junction = law.junctions(parameters, area, edge, reverse)
    bottom, side = 0.9e-3 * (1.0 + 1.1 / 0.8) ** -0.5, 0.25e-9 * (1.0 + 1.1 / 0.8) ** -0.33
    # Its perimeter counts the edge under the gate, which the table takes with the width.
    np.testing.assert_allclose(junction, 2e-12 * bottom + (5e-6 + 10e-6) * side, rtol=0.01)
    noise = law.noise_conductance(*v)
    error = np.abs(noise[saturated] / law.drain(*v).gm[saturated] * 1.5 - 1.0)
    assert np.percentile(error, 95.0) < 0.03
    assert 4.0 * BOLTZMANN * NOMINAL * noise.max() < 1e-20


def test_the_table_again_without_the_process_file(made: Path, tmp_path: Path) -> None:
    for name in ("all.lib", "parts.lib", "more.lib", "mine.toml", "mine.nc"):
        shutil.copy(made.parent / name, tmp_path / name)
    text = (tmp_path / "mine.toml").read_text(encoding="utf-8").replace("7.5 mV*um", "3 mV*um")
    (tmp_path / "mine.toml").write_text(text, encoding="utf-8")
    words = ["process", "characterise", str(tmp_path / "all.lib"), *DEVICES, "--lengths", "1 um, 2 um, 4 um"]
    result = call(*words, "--widths", "2 um, 10 um", "--to", str(tmp_path / "mine.toml"), "--replace", "--quiet")
    assert result.exit_code == 0, result.stderr
    assert (tmp_path / "mine.toml").read_text(encoding="utf-8") == text
    assert len(read_tables(tmp_path / "mine.nc").sizes["n"].lengths) == 3


def test_models_without_a_subcircuit(ngspice: str, tmp_path: Path) -> None:
    library = tmp_path / "bare.lib"
    library.write_text(
        ".model nbare nmos level=1 vto=0.6 kp=150u gamma=0.5 phi=0.8 lambda=0.05\n"
        ".model pbare pmos level=1 vto=-0.6 kp=50u gamma=0.5 phi=0.8 lambda=0.05\n",
        encoding="ascii",
    )
    words = ["process", "characterise", str(library), "--nmos", "nbare", "--pmos", "pbare", "--supply", "2 V", *SIZES]
    result = call(*words, "--to", str(tmp_path / "bare.toml"), "--quiet")
    assert result.exit_code == 0, result.stderr
    process = load_process(tmp_path / "bare.toml")
    assert process.library is not None
    assert process.library.nmos.kind == "model"
    law, _ = process.bind_law(["n"], np.full((1, 400), 5e-6), np.full((1, 400), 4e-6), NOMINAL, "typical")
    v = points()
    assert np.percentile(np.abs(law.drain(*v).id / square(*v, 5e-6, 4e-6) - 1.0), 95.0) < 0.01


@pytest.mark.parametrize(
    ("words", "code", "message"),
    [
        (["--section", "xx"], 2, 'all.lib: has no section "xx"; allowed are start, tt, ss, broken'),
        (["--nmos", "nchannel"], 1, "nchannel of all.lib: the simulator shows no operating point of such a transistor"),
        (["--section", "broken"], 1, "its last lines:"),
        (["--lengths", "1 um, x"], 2, '--lengths: found " x"'),
        (["--widths", "-1 um"], 2, '--widths: found "-1 um"; it is out of range'),
        (["--supply", "0 V"], 2, '--supply: found "0 V"; it is out of range'),
        (["--temperature", "900 degC"], 2, '--temperature: found "900 degC"; it is out of range'),
        (["--corner", "slow"], 2, '--corner: found "slow"; NAME=SECTION is needed, such as slow=ss'),
        (["--corner", "typical=ss"], 2, '--corner: "typical" is there twice'),
        (["--to", "mine"], 2, "--to: found mine; the name of a process file is needed"),
        (["--to", "all.lib/mine.toml"], 1, "all.lib/mine.toml: cannot be written: "),
        (["--replace"], 2, "--replace: mine.toml is not there"),
        (["--simulator", "no-such-program"], 2, '--simulator: found "no-such-program"; there is no such program'),
        (["--inner", "m7"], 2, "nch: has the transistors m0; say with --inner which one is read"),
        (["--nmos", "n;h"], 2, 'nmos.name: found "n;h"'),
        (["--junctions", "x.csv"], 2, "--junctions: goes with --from-csv"),
        (["--from-csv", "x.csv"], 2, "--from-csv: found with a library; one of them is allowed"),
    ],
)
def test_wrong_input(words: list[str], code: int, message: str, cli: Cli, tmp_path: Path, ngspice: str) -> None:
    write_library(tmp_path)
    given = dict(zip(DEVICES[::2], DEVICES[1::2], strict=True)) | dict(zip(SIZES[::2], SIZES[1::2], strict=True))
    given["--to"] = "mine.toml"
    given |= dict(zip(words[::2], words[1::2], strict=False))
    options = [word for pair in given.items() for word in pair] + (words if len(words) == 1 else [])
    result = cli("process", "characterise", "all.lib", *options, "--quiet")
    assert result.exit_code == code, result.output
    assert message in result.stderr
    assert result.stderr.startswith("optisize: ")
    assert "Traceback" not in result.stderr
    assert sorted(p.name for p in tmp_path.iterdir()) == ["all.lib", "more.lib", "parts.lib"]


@pytest.mark.parametrize("missing", ["--nmos", "--pmos", "--to", "LIBRARY"])
def test_what_is_missing(missing: str, cli: Cli, tmp_path: Path) -> None:
    write_library(tmp_path)
    given = {"--nmos": "nch", "--pmos": "pch", "--to": "mine.toml"}
    words = [w for key, value in given.items() if key != missing for w in (key, value)]
    result = cli("process", "characterise", *([] if missing == "LIBRARY" else ["all.lib"]), *words)
    assert result.exit_code == 2
    assert f"{missing}: is missing" in result.stderr


def test_what_is_there_stays(cli: Cli, tmp_path: Path) -> None:
    write_library(tmp_path)
    (tmp_path / "mine.nc").write_text("mine", encoding="ascii")
    result = cli("process", "characterise", "all.lib", *DEVICES, *SIZES, "--to", "mine.toml")
    assert result.exit_code == 2
    assert "mine.nc: already exists" in result.stderr
    assert (tmp_path / "mine.nc").read_text(encoding="ascii") == "mine"


def test_no_simulator(cli: Cli, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    write_library(tmp_path)
    monkeypatch.setenv("PATH", str(tmp_path))
    monkeypatch.delenv("OPTISIZE_NGSPICE", raising=False)
    result = cli("process", "characterise", "all.lib", *DEVICES, *SIZES, "--to", "mine.toml")
    assert result.exit_code == 1
    assert "apt install ngspice" in result.stderr
    assert "--decks-only and --from-csv work with another simulator" in result.stderr


SHOWN = 'print(" device m.xprobe.m0 m.xprobe.mcore\\n model inside inside\\n id 1e-6 1e-6\\n vdsat 0.1 0.1")'


@pytest.mark.parametrize(
    ("code", "message"),
    [
        ('print("doom")', "doom"),
        (f"{SHOWN}\nprint('no convergence in sweep')", "no convergence in sweep"),
        (f"{SHOWN}\nopen('sweep.raw', 'w').write('half')", "is no whole raw file"),
    ],
)
def test_a_sweep_that_does_not_come_back(
    code: str, message: str, pretender: Pretender, cli: Cli, tmp_path: Path
) -> None:
    """The simulator's own last lines are shown, and nothing half-made is left."""
    write_library(tmp_path)
    words = [*DEVICES, *SIZES, "--to", "mine.toml", "--simulator", str(pretender(code)), "--quiet"]
    result = cli("process", "characterise", "all.lib", *words)
    assert result.exit_code == 1, result.output
    assert message in result.stderr
    assert sorted(p.name for p in tmp_path.iterdir()) == ["all.lib", "more.lib", "parts.lib", "pretender"]


def test_decks_only(cli: Cli, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """No simulator is needed, and every deck names the library and the one finger."""
    write_library(tmp_path)
    monkeypatch.setenv("PATH", "")
    words = ["process", "characterise", "all.lib", *DEVICES, *SIZES, "--decks-only", "decks"]
    result = cli(*words)
    assert result.exit_code == 0, result.stderr
    names = sorted(p.name for p in (tmp_path / "decks").iterdir())
    assert names[-1] == "README"
    assert names[0] == "001-typical-27-n-currents.sp"
    assert len(names) == int(result.stdout.split()[1]) + 1
    for name in names[:-1]:
        text = (tmp_path / "decks" / name).read_text(encoding="utf-8")
        assert f'.lib "{tmp_path / "all.lib"}" start' in text
        assert f'.lib "{tmp_path / "all.lib"}" tt' in text
        assert "set num_threads=1" in text
    assert "noise_10hz" in (tmp_path / "decks" / "README").read_text(encoding="utf-8")
    again = cli(*words)
    assert again.exit_code == 2
    assert "decks: already exists" in again.stderr


def leaking(vds: Array) -> Array:
    """Some share of a current that flows to the bulk."""
    return np.asarray(np.exp(-20.0 / (vds + 0.3)))


@pytest.fixture(scope="module")
def sweeps() -> tuple[pd.DataFrame, pd.DataFrame]:
    """Sweeps of the charge law as another simulator would write them, and its junctions."""
    source = load_process("generic-180")
    rows, drawn = [], []
    axes = (
        np.arange(0.0, 1.91, 0.05),
        np.array([0.02, 0.05, 0.1, 0.2, 0.3, 0.5, 0.8, 1.2, 1.9]),
        np.arange(0.0, 1.3, 0.3),
    )
    for channel in ("n", "p"):
        length, width, g, d, s = (x.reshape(1, -1) for x in np.meshgrid(LENGTHS[2:5], WIDTHS[1:], *axes, indexing="ij"))
        v = (g + s, d + s, s)
        law, parameters = source.bind_law([channel], width, length, NOMINAL, "typical")
        drain, gate = law.drain(*v), law.capacitances(*v)
        white = 4.0 * BOLTZMANN * NOMINAL * law.noise_conductance(*v)
        one = np.ones_like(width)
        flicker = [law.flicker(parameters, drain, v, (width, one, length), f) for f in (1.0, 10.0)]
        table = {"length": length, "width": width, "vgs": g, "vds": d, "vsb": s, "id": drain.id}
        table |= {"vdsat": law.saturation(*v).vdsat, "cgg": gate.cgs + gate.cgd + gate.cgb, "cgd": gate.cgd}
        table |= {"cgs": gate.cgs, "noise_white": white, "isub": drain.id * leaking(d)}
        table |= {"noise_1hz": white + flicker[0], "noise_10hz": white + flicker[1]}
        rows.append(pd.DataFrame({"channel": channel} | {k: x.ravel() for k, x in table.items()}))
        reverse = np.linspace(-0.2, 4.0, 30)[None]
        ends = [
            law.junctions(parameters, a * np.ones_like(reverse), e * np.ones_like(reverse), reverse)
            for a, e in ((1, 0), (0, 1))
        ]
        drawn.append(
            pd.DataFrame(
                {"channel": channel, "reverse": reverse[0], "area": ends[0][0], "edge": ends[1][0], "gate": 0.0}
            )
        )
    return pd.concat(rows), pd.concat(drawn)


def write_csv(place: Path, sweeps: tuple[pd.DataFrame, pd.DataFrame]) -> None:
    sweeps[0].to_csv(place / "sweeps.csv", index=False)
    sweeps[1].to_csv(place / "junctions.csv", index=False)


def test_sweeps_of_another_simulator(cli: Cli, tmp_path: Path, sweeps: tuple[pd.DataFrame, pd.DataFrame]) -> None:
    write_csv(tmp_path, sweeps)
    words = ["--from-csv", "sweeps.csv", "--junctions", "junctions.csv", "--supply", "1.8 V", "--to", "mine.toml"]
    result = cli("process", "characterise", *words)
    assert result.exit_code == 0, result.stderr
    process, source = load_process(tmp_path / "mine.toml"), load_process("generic-180")
    rng = np.random.default_rng(6)
    shape = np.full((1, 500), 5e-6), rng.choice(LENGTHS[2:5], (1, 500))
    vs = rng.uniform(0.0, 1.0, (1, 500))
    v = vs + rng.uniform(0.4, 1.3, vs.shape), vs + rng.uniform(0.05, 1.5, vs.shape), vs
    got, wanted = (p.bind_law(["n"], *shape, NOMINAL, "typical")[0] for p in (process, source))
    on = wanted.drain(*v).id > 1e-12
    for name in ("id", "gm"):
        error = np.abs(getattr(got.drain(*v), name) / getattr(wanted.drain(*v), name) - 1.0)[on]
        assert np.percentile(error, 95.0) < 0.02, name
    drain = got.drain(*v)
    leak = got.leak(drain, *v)
    np.testing.assert_allclose((leak.id / drain.id)[on], leaking(v[1] - vs)[on], rtol=0.02)
    np.testing.assert_allclose(
        process.transistor_arrays(["n"], NOMINAL, "typical")["flicker_exponent"],
        [[source.nmos.flicker_exponent]],
        rtol=1e-3,
    )


def test_sweeps_without_noise_and_vdsat(cli: Cli, tmp_path: Path, sweeps: tuple[pd.DataFrame, pd.DataFrame]) -> None:
    few = sweeps[0].drop(columns=["vdsat", "isub", "noise_white", "noise_1hz", "noise_10hz"])
    few.to_csv(tmp_path / "sweeps.csv", index=False)
    result = cli("process", "characterise", "--from-csv", "sweeps.csv", "--supply", "1.8 V", "--to", "mine.toml")
    assert result.exit_code == 0, result.stderr
    law, parameters = load_process(tmp_path / "mine.toml").bind_law(
        ["n"], np.array([[5e-6]]), np.array([[0.7e-6]]), NOMINAL, "typical"
    )
    v = np.array([[0.8]]), np.array([[1.0]]), np.array([[0.1]])
    drain = law.drain(*v)
    assert 0.5 < law.noise_conductance(*v)[0, 0] / drain.gms[0, 0] < 0.7
    assert law.flicker(parameters, drain, v, v, 1.0)[0, 0] == 0.0
    assert 0.08 < law.saturation(*v).vdsat[0, 0] < 0.5


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (lambda f: f.drop(columns="cgd"), 'the column "cgd" is missing; did you mean'),
        (lambda f: f[f["channel"] == "n"], 'typical at 27 degC: has no rows of channel "p"'),
        (lambda f: f.iloc[1:], "every combination of its lengths, widths, vgs, vds and vsb is needed once"),
        (lambda f: f.assign(channel="q"), "channel: found q; allowed are n, p"),
        (lambda f: f.assign(id=-1.0), "a current above zero is needed at the highest vgs and vds"),
        (lambda f: f[f["vsb"] < 0.4], "found 2 values of vsb; at least 3 are needed"),
        (lambda f: f.astype({"id": str}).replace({"id": {f["id"].astype(str).iloc[7]: "much"}}), 'id: found "much"'),
    ],
)
def test_wrong_sweeps(change, message: str, cli: Cli, tmp_path: Path, sweeps) -> None:  # type: ignore[no-untyped-def]
    change(sweeps[0]).to_csv(tmp_path / "sweeps.csv", index=False)
    result = cli("process", "characterise", "--from-csv", "sweeps.csv", "--to", "mine.toml")
    assert result.exit_code == 2, result.output
    assert message in result.stderr
    assert [p.name for p in tmp_path.iterdir()] == ["sweeps.csv"]


def test_no_sweeps(cli: Cli, tmp_path: Path) -> None:
    result = cli("process", "characterise", "--from-csv", "sweeps.csv", "--to", "mine.toml")
    assert result.exit_code == 2
    assert "sweeps.csv: there is no such file" in result.stderr


def test_a_problem_of_a_table(tmp_path: Path) -> None:
    """Lengths of the tables only, corner and temperature that are there, and a run that stands alone."""
    from optisize.errors import InputError
    from optisize.problem.load import load_problem
    from tests.problem.texts import RESISTOR

    for name in ("sampled.toml", "sampled.nc"):
        shutil.copy(sampled_process().with_name(name), tmp_path / name)
    text = RESISTOR.replace('process = "generic-180"', 'process = "sampled.toml"\nlengths = "tabulated"')
    assert text != RESISTOR
    path = tmp_path / "stage.toml"
    path.write_text(text, encoding="utf-8")
    problem = load_problem(path)
    found = problem.space.decode(np.random.default_rng(1).random((problem.space.dimensions, 200)))
    assert np.isin(np.round(found["input.length"] * 1e9), np.round(LENGTHS * 1e9)).all()
    assert len(np.unique(found["input.length"])) > 2
    assert str(tmp_path / "sampled.nc") in problem.process_text
    assert set(problem.hashes) == {"problem", "process", "table"}
    values = problem.measure(found)
    assert np.isfinite(values["gain"]).mean() > 0.5
    for wrong, message in (
        ('temperature = "50 degC"', "conditions: typical at 50 degC is not in the table"),
        ('corner = "slow"', 'corner: "slow" is not in the process; allowed are typical'),
    ):
        path.write_text(text.replace('temperature      = "27 degC"', wrong), encoding="utf-8")
        with pytest.raises(InputError, match=message):
            load_problem(path)
    path.write_text(RESISTOR.replace('process = "generic-180"', 'process = "generic-180"\nlengths = "tabulated"'))
    with pytest.raises(InputError, match='lengths: found "tabulated", but the process has law "charge"'):
        load_problem(path)


def test_a_run_of_a_table_stands_alone(cli: Cli, tmp_path: Path) -> None:
    """Its process file names the table where it is."""
    from tests.problem.texts import RESISTOR

    place = tmp_path / "elsewhere"
    place.mkdir()
    for name in ("sampled.toml", "sampled.nc"):
        shutil.copy(sampled_process().with_name(name), place / name)
    text = RESISTOR.replace('process = "generic-180"', 'process = "sampled.toml"')
    (place / "stage.toml").write_text(text, encoding="utf-8")
    quick = ["--population", "40", "--generations", "4", "--no-figures", "--quiet"]
    result = cli("search", "elsewhere/stage.toml", "--to", "run", *quick)
    assert result.exit_code == 0, result.stderr
    for words in (
        ["front", "run"],
        ["spread", "run", "--design", "1", "--samples", "50"],
        ["corners", "run", "--design", "1"],
    ):
        result = cli(*words)
        assert result.exit_code == 0, result.stderr


def test_a_process_of_a_table_is_shown(cli: Cli) -> None:
    path = str(sampled_process())
    result = cli("process", "show", path)
    assert result.exit_code == 0, result.stderr
    assert "typical at 27 degC" in result.stdout
    assert "180 nm to 8 um, 8 of them" in result.stdout
    record = json.loads(cli("process", "show", path, "--json").stdout)
    assert record["table"]["lengths"]["n"] == pytest.approx(LENGTHS.tolist())


def test_a_sizing_outside_of_the_table_is_refused_with_the_reason(tmp_path: Path, cli: Cli) -> None:
    for name in ("sampled.toml", "sampled.nc"):
        shutil.copy(sampled_process().with_name(name), tmp_path / name)
    process = (tmp_path / "sampled.toml").read_text(encoding="utf-8")
    wider = process.replace('maximum_finger = "10 um"', 'maximum_finger = "50 um"')
    (tmp_path / "sampled.toml").write_text(wider, encoding="utf-8")
    from tests.problem.texts import RESISTOR, SIZING

    text = RESISTOR.replace('process = "generic-180"', 'process = "sampled.toml"')
    (tmp_path / "stage.toml").write_text(text, encoding="utf-8")
    (tmp_path / "sizing.toml").write_text(SIZING.replace('"20 um"', '"60 um"'), encoding="utf-8")
    result = cli("assess", "stage.toml", "sizing.toml")
    assert result.exit_code == 2, result.output
    assert "finger width 30 um of input.p is not in the table (220 nm to 10 um)" in result.stderr
