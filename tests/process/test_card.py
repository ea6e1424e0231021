"""Process files: what they say, how temperature and corners move it, and what is answered to a wrong one.

Constants: CODATA 2018 (as in `scipy.constants`). Messages and directions: common practice, no source.
"""

from __future__ import annotations

import re
from importlib import resources
from pathlib import Path

import numpy as np
import pytest
import scipy.constants

from optisize.errors import InputError
from optisize.process.card import (
    BOLTZMANN,
    ELEMENTARY_CHARGE,
    Process,
    built_in_names,
    load_process,
    locate_process,
    thermal_voltage,
)

NOMINAL = 300.15
ONE = np.array([[1e-5]]), np.array([[1e-6]])


def test_constants() -> None:
    assert scipy.constants.k == BOLTZMANN
    assert scipy.constants.e == ELEMENTARY_CHARGE
    assert float(thermal_voltage(300.0)) == pytest.approx(25.8519998e-3, abs=5e-11)


@pytest.fixture(params=built_in_names())
def process(request: pytest.FixtureRequest) -> Process:
    return load_process(request.param)


def test_nominal_conditions_change_nothing(process: Process) -> None:
    arrays = process.transistor_arrays(["n", "p"], process.nominal.temperature, "typical")
    for key, value in arrays.items():
        assert value.shape == (2, 1)
        np.testing.assert_allclose(value[:, 0], [getattr(process.nmos, key), getattr(process.pmos, key)], rtol=1e-14)
    assert process.resistance_ratio(process.nominal.temperature, "typical") == 1.0


def test_values_read_with_their_prefixes() -> None:
    """Of the handbook process, by hand."""
    p = load_process("handbook")
    assert p.nmos.current_factor == pytest.approx(150e-6, rel=1e-12)
    assert p.nmos.oxide_capacitance == pytest.approx(4.6e-3, rel=1e-12)
    assert p.nmos.overlap_capacitance == pytest.approx(0.3e-9, rel=1e-12)
    assert p.nmos.threshold_matching == pytest.approx(8e-9, rel=1e-12)
    assert p.nmos.factor_matching == pytest.approx(0.015e-6, rel=1e-12)
    assert p.nominal.temperature == pytest.approx(300.15)
    assert p.grid.step == pytest.approx(50e-9)


@pytest.mark.parametrize("channel", ["n", "p"])
def test_heat(process: Process, channel: str) -> None:
    """Threshold and mobility fall with temperature: less current in strong inversion, more below threshold."""
    cold, hot = (process.transistor_arrays([channel], t, "typical") for t in (NOMINAL, NOMINAL + 60.0))
    assert hot["threshold"] < cold["threshold"]
    assert hot["current_factor"] < cold["current_factor"]
    card = process.nmos if channel == "n" else process.pmos
    np.testing.assert_allclose(cold["threshold"] - hot["threshold"], 60.0 * card.threshold_drift, rtol=1e-9)
    ratio = ((NOMINAL + 60.0) / NOMINAL) ** card.mobility_exponent
    np.testing.assert_allclose(hot["current_factor"] / cold["current_factor"], ratio, rtol=1e-9)
    laws = [process.bind_law([channel], *ONE, t, "typical")[0] for t in (NOMINAL, NOMINAL + 60.0)]
    zero, supply = np.zeros((1, 1)), np.full((1, 1), process.nominal.supply)
    strong = [law.drain(supply, supply, zero).id for law in laws]
    assert strong[1] < strong[0]
    if process.law == "charge":
        off = [law.drain(zero + 0.1, supply, zero).id for law in laws]
        assert off[1] > 5.0 * off[0]


@pytest.mark.parametrize(("corner", "n_moves", "p_moves"), [("slow", -1, -1), ("fast", 1, 1)])
def test_corners(process: Process, corner: str, n_moves: int, p_moves: int) -> None:
    for channel, moves in (("n", n_moves), ("p", p_moves)):
        laws = [process.bind_law([channel], *ONE, NOMINAL, c)[0] for c in ("typical", corner)]
        gate, zero = np.full((1, 1), 1.0), np.zeros((1, 1))
        typical, moved = (law.drain(gate, gate, zero).id for law in laws)
        assert np.sign(moved - typical) == moves
    assert np.sign(process.resistance_ratio(NOMINAL, corner) - 1.0) == -n_moves


def test_crossed_corners() -> None:
    p = load_process("generic-180")
    for corner, n_rises in (("fast-n-slow-p", True), ("slow-n-fast-p", False)):
        plain, moved = (p.transistor_arrays(["n", "p"], NOMINAL, c)["current_factor"] for c in ("typical", corner))
        assert (moved > plain)[:, 0].tolist() == [n_rises, not n_rises]


def test_corner_names() -> None:
    p = load_process("generic-65")
    assert p.corner_names[0] == "typical"
    with pytest.raises(InputError, match=r'"slo" is not in the process; allowed are .*did you mean "slow"'):
        p.corner("slo")


def test_resistor_follows_temperature_and_corner() -> None:
    p = load_process("generic-180")
    expected = 1.18 * (1.0 - 0.0008 * 50.0)
    assert p.resistance_ratio(NOMINAL + 50.0, "slow") == pytest.approx(expected, rel=1e-12)


def text(name: str = "generic-180") -> str:
    return resources.files("optisize.process").joinpath("data", f"{name}.toml").read_text(encoding="utf-8")


def refusal(tmp_path: Path, content: str) -> str:
    """Return the message with which a process file is refused."""
    path = tmp_path / "house.toml"
    path.write_text(content, encoding="utf-8")
    with pytest.raises(InputError) as caught:
        load_process(path)
    message = str(caught.value)
    assert message.startswith(str(path))
    assert "\n" not in message
    return message.removeprefix(f"{path}: ")


def test_a_file_of_ones_own(tmp_path: Path) -> None:
    path = tmp_path / "house.toml"
    path.write_text(text().replace('threshold            = "0.45 V"', 'threshold = "0.5 V"'), encoding="utf-8")
    assert load_process(path).nmos.threshold == 0.5
    assert locate_process("house.toml", beside=tmp_path) == path


@pytest.mark.parametrize(
    ("found", "replaced", "message"),
    [
        ('threshold            = "0.45 V"\n', "", "nmos.threshold: is missing"),
        ("body_effect  ", "body_efect  ", 'nmos.body_efect: unknown key; .*did you mean "body_effect"'),
        ("early_voltage  ", "channel_modulation  ", "nmos.channel_modulation: unknown key; .*early_voltage"),
        ('"0.45 V"', '"0.45 A"', 'nmos.threshold: found "0.45 A"; .*"V" is needed'),
        ('"310 uA/V^2"', '"310 uA/V"', 'nmos.current_factor: found "310 uA/V"; .*"A/V.2" is needed'),
        ('"0.45 V"', '"high"', 'nmos.threshold: found "high"; .*not a number'),
        ('"310 uA/V^2"', '"-310 uA/V^2"', 'nmos.current_factor: found "-310 uA/V.2"; .* 0'),
        ('"0.85 V"', "nan", "nmos.surface_potential: found (nan|NaN); .*finite"),
        ('"0.18 um"', '"30 um"', "grid.minimum_length is above grid.maximum_length"),
        ('"0.22 um"', '"20 um"', "grid.minimum_width is above grid.maximum_finger"),
        ("spacing_factor = 1.6", "spacing_factor = 0.6", "grid.spacing_factor: found 0.6; .* 1$"),
        ('law   = "charge"', 'law   = "chage"', 'law: found "chage"; allowed are .*did you mean "charge"'),
        ('law   = "charge"', "", "law: is missing; allowed are .*charge"),
        ('law   = "charge"', "law = 3", "law: found 3; allowed are"),
        ("[resistor]", "[resister]", 'resister: unknown key; .*did you mean "resistor"'),
        ("[pmos]", "[pmos", "not valid TOML"),
        ("{ threshold = \"40 mV\", factor = 0.92 }", "{ threshold = \"40 mV\", factr = 0.92 }", "corners.slow.*factr"),
    ],
)  # fmt: skip
def test_wrong_files(tmp_path: Path, found: str, replaced: str, message: str) -> None:
    content = text()
    assert found in content
    assert re.match(message, refusal(tmp_path, content.replace(found, replaced, 1)))


def test_missing_table(tmp_path: Path) -> None:
    head, _, rest = text().partition("[pmos]")
    _, _, tail = rest.partition("[resistor]")
    assert refusal(tmp_path, head + "[resistor]" + tail) == "pmos: is missing"


def test_empty_file(tmp_path: Path) -> None:
    assert refusal(tmp_path, "  \n") == "the file is empty"


def test_unknown_process() -> None:
    with pytest.raises(
        InputError, match=r'process "generic-18" is neither built in nor a file.*did you mean "generic-180"'
    ):
        load_process("generic-18")


def test_missing_file(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="there is no such file"):
        load_process(tmp_path / "house.toml")


def test_a_process_cannot_be_changed_in_place(process: Process) -> None:
    with pytest.raises(ValueError, match="frozen"):
        process.nmos.threshold = 1.0
