"""How a design holds when the process moves: the Monte Carlo of mismatch, its yield, the corners, and both commands."""

from __future__ import annotations

import json
import math
from dataclasses import replace
from importlib import resources
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from optisize.errors import InputError
from optisize.front import spread as spreading
from optisize.front.corners import at_corners
from optisize.front.pick import pick
from optisize.front.spread import BINS, Distribution, Spread, clopper_pearson, counts_sigmas, spread
from optisize.problem.evaluate import CHUNK, Problem
from optisize.problem.load import load_sizing
from optisize.process.law import Array
from optisize.show.corners import corners_record
from optisize.show.spread import bars, histograms, spread_record
from optisize.stage import mismatch
from optisize.stage.analysis import Analysis
from optisize.stage.bias import OperatingPoint
from optisize.stage.measures import CATALOGUE
from optisize.stage.mismatch import Deviations, Sampled
from tests.conftest import Cli
from tests.problem.test_bad_input import refused
from tests.problem.texts import IDEAL, RESISTOR, SIZING, changed, loaded

EASY = changed(RESISTOR, ("output_swing", 'output_swing = { min = "0.2 V" }'), ("cmrr", 'cmrr_mismatch = "max"'))
CENTRED = changed(EASY, ("bandwidth", 'gain = { min = "8.3 dB" }'))  # a limit in the middle of what the samples have
OTHERS = ("offset", "offset_systematic", "cmrr_mismatch", "common_mode_gain")


HANDBOOK = resources.files("optisize.process").joinpath("data", "handbook.toml").read_text(encoding="utf-8")
FLAT = HANDBOOK.replace('"0.08 um/V"', '"0 um/V"').replace('"0.1 um/V"', '"0 um/V"')  # no channel modulation
FLAT_IDEAL = changed(  # a pair in the square law, with neither channel modulation nor body effect
    IDEAL,
    ("process", 'process = "flat.toml"'),
    ("output", 'output = "differential"\nbulk = "source"'),
    ("supply", 'supply = "3.3 V"'),
    ("common_mode", 'common_mode = "1.8 V"'),
    ("input.length", 'input.length = ["0.5 um", "10 um"]'),
    ("cmrr", ""),
)
IDEAL_SIZING = """\
[sizes]
input.width     = "20 um"
input.length    = "0.5 um"
load.resistance = "100 kohm"
tail.current    = "4 uA"
"""
FLAT_SIZING = """\
[sizes]
input.width     = "20 um"
input.length    = "1 um"
load.resistance = "20 kohm"
tail.current    = "50 uA"
"""


def given(place: Path, text: str = CENTRED, sizing: str = SIZING) -> tuple[Problem, dict[str, Array]]:
    """Return a problem and a sizing by hand."""
    problem = loaded(place, text)
    (place / "hand.toml").write_text(sizing, encoding="utf-8")
    return problem, load_sizing(place / "hand.toml", problem)


def of(found: Spread, name: str) -> Distribution:
    return next(d for d in found.distributions if d.measure.name == name)


@pytest.fixture(scope="module")
def spreaded(tmp_path_factory: pytest.TempPathFactory) -> Spread:
    problem, sizes = given(tmp_path_factory.mktemp("spread"))
    return spread(problem, sizes, samples=3000, seed=2, names=OTHERS)


@pytest.mark.parametrize(
    ("passed", "samples", "low", "high"), [(7, 50, 0.0581917, 0.2673960), (1000, 1000, 0.9963179, 1.0)]
)
def test_the_interval_of_a_share(passed: int, samples: int, low: float, high: float) -> None:
    """Clopper and Pearson, Biometrika 26, 1934, at 95 % (values from scipy.stats, reproduced)."""
    assert clopper_pearson(passed, samples) == pytest.approx((low, high), abs=5e-8)


def test_none_of_the_samples_is_the_mirror_of_all(spreaded: Spread) -> None:
    low, high = clopper_pearson(0, 1000)
    assert (low, high) == pytest.approx((0.0, 1.0 - 0.9963179), abs=5e-8)


def test_the_same_seed_gives_the_same_samples_on_any_number_of_threads(tmp_path: Path) -> None:
    problem, sizes = given(tmp_path)
    counted: list[int] = []
    one, three = (
        spread(problem, sizes, samples=2 * CHUNK + 500, seed=4, threads=n, watch=counted.append) for n in (1, 3)
    )
    assert spread_record(one) == spread_record(three)
    for a, b in zip(one.distributions, three.distributions, strict=True):
        np.testing.assert_array_equal(a.values, b.values)
        np.testing.assert_array_equal(a.linear, b.linear)
    assert counted == 2 * [CHUNK, 2 * CHUNK, 2 * CHUNK + 500]
    other = spread(problem, sizes, samples=500, seed=5)
    assert (of(other, "gain").values != of(one, "gain").values[:500]).all()


def test_a_whole_chunk_does_not_depend_on_how_many_follow(tmp_path: Path) -> None:
    problem, sizes = given(tmp_path)
    short, long = (spread(problem, sizes, samples=n, seed=4) for n in (CHUNK, 2 * CHUNK))
    for a, b in zip(short.distributions, long.distributions, strict=True):
        np.testing.assert_array_equal(a.values, b.values[:CHUNK])


def test_a_sample_does_not_depend_on_those_beside_it(tmp_path: Path) -> None:
    problem, sizes = given(tmp_path)
    matched = Analysis(problem.circuit(sizes))
    sigma = mismatch.spreads(matched.circuit)
    rng = np.random.default_rng(1)
    every = Deviations(*(s * rng.standard_normal((len(s), 50)) for s in sigma))
    beside = spreading._sampled_analysis(matched, every)
    alone = spreading._sampled_analysis(matched, Deviations(*(x[:, 17:18] for x in every)))
    assert alone.offset[0] == pytest.approx(beside.offset[17], rel=1e-9)
    assert alone.adm[0] == pytest.approx(beside.adm[17], rel=1e-12)


def test_yields_count_the_samples_that_meet_a_limit(spreaded: Spread) -> None:
    limits = {limit.measure.name: limit for limit in spreaded.problem.limits}
    assert [y.name for y in spreaded.yields] == [*limits, "all limits"]
    good = np.ones(spreaded.samples, dtype=bool)
    for y in spreaded.yields[:-1]:
        met = limits[y.name].met(of(spreaded, y.name).values)
        expected = limits[y.name].met(of(spreaded, y.name).linear)
        assert (y.passed, y.samples, y.linear) == (met.sum(), spreaded.samples, expected.mean())
        assert y.interval == clopper_pearson(y.passed, y.samples)
        assert y.interval[0] <= y.share == y.passed / y.samples <= y.interval[1]
        good &= met
    everything = spreaded.yields[-1]
    assert everything.passed == good.sum() == min(y.passed for y in spreaded.yields[:-1])
    gain = next(y for y in spreaded.yields if y.name == "gain")
    assert 0.3 < gain.share < 0.7
    assert abs(gain.linear - gain.share) < 0.03


def test_the_first_order_prediction_is_straight_in_the_deviations(spreaded: Spread, tmp_path: Path) -> None:
    """So its standard deviation is that of the measures, which count each parameter once and add the squares."""
    problem, sizes = given(tmp_path)
    matched = Analysis(problem.circuit(sizes))
    close = 4.0 / math.sqrt(2.0 * spreaded.samples)  # four standard deviations of a standard deviation
    found = of(spreaded, "offset_systematic")
    assert found.linear_sigma == pytest.approx(mismatch.offset_sigma(matched)[0], rel=close)
    assert found.sigma == pytest.approx(found.linear_sigma, rel=0.01)
    gain = of(spreaded, "common_mode_gain")
    assert gain.linear_sigma == pytest.approx(mismatch.common_gain_sigma(matched)[0], rel=close)
    assert np.median(gain.linear) == pytest.approx(gain.matched, rel=0.01)


def test_what_bends_by_definition_is_folded_from_what_is_straight(spreaded: Spread) -> None:
    """The magnitude of an offset has a mean of sigma sqrt(2 / pi) though it is zero without mismatch; and a rejection
    is that of both gains to first order, which on a scale of decibels are straight up to their squares."""
    offset, magnitude = of(spreaded, "offset_systematic"), of(spreaded, "offset")
    np.testing.assert_allclose(magnitude.linear, np.abs(offset.linear), rtol=1e-12)
    np.testing.assert_allclose(magnitude.values, np.abs(offset.values), rtol=1e-12)
    assert magnitude.mean == pytest.approx(offset.sigma * math.sqrt(2.0 / math.pi), rel=0.05)
    gain, common, rejection = (of(spreaded, name) for name in ("gain", "common_mode_gain", "cmrr_mismatch"))
    np.testing.assert_allclose(rejection.values, gain.values - 20.0 * np.log10(np.abs(common.values)), atol=1e-9)
    apart = rejection.linear - (gain.linear - 20.0 * np.log10(np.abs(common.linear)))
    assert (np.abs(apart) <= 0.1 * (gain.linear - gain.matched) ** 2 + 1e-3).all()


def test_measures_that_count_deviations_read_what_a_sample_has_itself(spreaded: Spread, tmp_path: Path) -> None:
    """Without mismatch they are the measures of the catalogue, one that counts deviations with none of them."""
    problem, sizes = given(tmp_path)
    at_rest = problem.measure(sizes, ["cmrr", *(d.measure.name for d in spreaded.distributions)])
    for d in spreaded.distributions:
        if not counts_sigmas(d.measure):
            assert d.matched == at_rest[d.measure.name][0]
    rejection, sigmas = of(spreaded, "cmrr_mismatch"), mismatch.common_gain_sigma(Analysis(problem.circuit(sizes)))[0]
    assert sigmas > 0.0
    assert rejection.matched == pytest.approx(at_rest["cmrr"][0], rel=1e-12)
    assert rejection.matched > at_rest["cmrr_mismatch"][0]


def test_histograms_hold_every_sample(spreaded: Spread) -> None:
    for d in spreaded.distributions:
        edges, counts = d.histogram()
        assert len(edges) == BINS + 1
        assert counts.sum() == spreaded.samples
        assert (np.diff(edges) > 0.0).all()
    shown = histograms(spreaded)
    assert len(shown) == sum(d.sigma > 0.0 for d in spreaded.distributions) < len(spreaded.distributions)
    for h in shown:
        assert h.counts.sum() == spreaded.samples
        assert h.linear.sum() <= spreaded.samples
    by_name = {h.label.split(" [")[0]: h for h in shown}
    assert by_name["gain"].bounds == (("min", pytest.approx(8.3)),)
    assert by_name["gain"].linear.sum() > 0.99 * spreaded.samples
    assert by_name["power"].label == "power [uW]"
    assert by_name["power"].bounds == (("max", pytest.approx(60.0)),)
    assert len(bars(of(spreaded, "gain"))) == 24
    assert max(bars(of(spreaded, "gain"))) == "█"
    assert bars(of(spreaded, "area")) == ""


def test_what_does_not_vary_is_left_out_unless_it_has_a_limit(spreaded: Spread, tmp_path: Path) -> None:
    assert of(spreaded, "area").sigma == 0.0
    problem, sizes = given(tmp_path, changed(CENTRED, ("area", "")))
    names = [d.measure.name for d in spread(problem, sizes, samples=50, names=("area", "input_noise")).distributions]
    assert "area" not in names
    assert "input_noise" in names


def test_the_record_is_finite_also_where_a_measure_is_unlimited(tmp_path: Path) -> None:
    """An ideal tail rejects the common mode without limit in the matched stage, and in no sample."""
    problem, sizes = given(tmp_path, changed(IDEAL, ("supply_current", 'area = "min"'), ("power", "")), IDEAL_SIZING)
    found = spread(problem, sizes, samples=100)
    record = json.loads(json.dumps(spread_record(found), allow_nan=False))
    assert of(found, "cmrr_mismatch").matched == math.inf
    assert of(found, "cmrr").matched == math.inf
    assert record["measures"]["cmrr"]["matched"] == "unlimited"
    assert set(record) == {"samples", "seed", "unsolved", "measures", "yield"}
    for m in record["measures"].values():
        assert len(m["histogram"]["edges"]) == len(m["histogram"]["counts"]) + 1
    for y in record["yield"].values():
        assert 0.0 <= y["interval"][0] <= y["yield"] <= y["interval"][1] <= 1.0


def test_what_varies_by_rounding_only_has_a_histogram(tmp_path: Path) -> None:
    """The supply current under an ideal tail."""
    problem, sizes = given(tmp_path, IDEAL, IDEAL_SIZING)
    found = spread(problem, sizes, samples=100)
    assert of(found, "supply_current").histogram()[1].sum() == 100
    json.dumps(spread_record(found), allow_nan=False)


def test_samples_without_an_operating_point_have_failed(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Every seventh sample is made one of them."""
    whole = spreading._sampled_analysis

    def some(matched: Analysis, deviations: Deviations) -> Sampled:
        found = whole(matched, deviations)
        if found.circuit.designs == 700:
            found.point = OperatingPoint(found.point.v, np.arange(700) % 7 > 0)
        return found

    monkeypatch.setattr(spreading, "_sampled_analysis", some)
    problem, sizes = given(tmp_path, EASY)
    found = spread(problem, sizes, samples=700, seed=1)
    assert found.unsolved == 100
    for y in found.yields:
        assert (y.passed, y.samples) == (600, 700)
        assert y.linear == 1.0
    for d in found.distributions:
        assert np.isnan(d.values).sum() == 100
        assert d.histogram()[1].sum() == 600
        assert math.isfinite(d.mean)
    json.dumps(spread_record(found), allow_nan=False)


def test_a_sizing_without_an_operating_point_is_refused(tmp_path: Path) -> None:
    problem, sizes = given(tmp_path)
    sizes["load.resistance"] = np.array([1e9])
    sizes["bias.current"] = np.array([1e-2])
    assert not Analysis(problem.circuit(sizes)).converged[0]
    with pytest.raises(InputError, match="no operating point"):
        spread(problem, sizes, samples=20)


def test_four_times_the_area_halves_the_offset(tmp_path: Path) -> None:
    """Of the pair alone: width and length doubled together keep the current and quarter the variance; Pelgrom,
    Duinmaijer and Welbers, IEEE JSSC 24, 1989 (from memory)."""
    (tmp_path / "flat.toml").write_text(FLAT.replace('"3 %*um"', '"0 %*um"'), encoding="utf-8")
    larger = changed(FLAT_SIZING, ("input.width", 'input.width = "40 um"'), ("input.length", 'input.length = "2 um"'))
    sigmas = []
    for sizing in (FLAT_SIZING, larger):
        problem, sizes = given(tmp_path, FLAT_IDEAL, sizing)
        sigmas.append(of(spread(problem, sizes, samples=1000, seed=1), "offset_systematic").sigma)
    assert sigmas[0] == pytest.approx(2.0 * sigmas[1], rel=1e-3)


def test_the_problem_s_own_conditions_come_first(tmp_path: Path) -> None:
    problem, sizes = given(tmp_path)
    found = at_corners(problem, sizes)
    assert found.conditions[0] == ("typical", problem.conditions.temperature)
    assert [corner for corner, _ in found.conditions] == list(problem.process.corner_names)
    for name, values in found.measures.items():
        np.testing.assert_array_equal(values[:1], problem.measure(sizes, [name])[name])
    assert found.limits_met[0] == bool((problem.assess(sizes).violation <= 0.0).all())


def test_a_corner_is_the_problem_under_its_conditions(tmp_path: Path) -> None:
    """Every column, also at other temperatures; the problem's own temperature named again adds nothing."""
    problem, sizes = given(tmp_path)
    found = at_corners(problem, sizes, ("-40 degC", "27 degC", "125 degC"))
    kelvins = [problem.conditions.temperature, 233.15, 398.15]
    assert [k for _, k in found.conditions] == pytest.approx(np.repeat(kelvins, len(problem.process.corner_names)))
    for column, (corner, kelvin) in enumerate(found.conditions):
        moved = replace(problem, conditions=replace(problem.conditions, corner=corner, temperature=kelvin))
        values = moved.measure(sizes, list(found.measures))
        for name, expected in values.items():
            np.testing.assert_array_equal(found.measures[name][column], expected[0])
        assert found.limits_met[column] == bool((moved.assess(sizes).violation <= 0.0).all())
    assert len(set(found.limits_met)) == 2  # these limits are tight enough to be missed somewhere


def test_the_problem_s_own_corner_comes_first(tmp_path: Path) -> None:
    problem, sizes = given(tmp_path, changed(CENTRED, ("temperature", 'temperature = "27 degC"\ncorner = "slow"')))
    found = at_corners(problem, sizes)
    assert found.conditions[0][0] == "slow"
    assert sorted(corner for corner, _ in found.conditions) == sorted(problem.process.corner_names)


def test_the_gain_of_the_square_law_at_the_corners(tmp_path: Path) -> None:
    """R sqrt(K W / L I): a shift of the threshold does nothing under an ideal tail, resistance counts fully, the
    current factor by its root, and the mobility falls with the power 1.5 of the temperature."""
    (tmp_path / "flat.toml").write_text(FLAT, encoding="utf-8")
    problem, sizes = given(tmp_path, FLAT_IDEAL, FLAT_SIZING)
    found = at_corners(problem, sizes, ("77 degC",))
    gain = dict(zip(found.conditions, found.measures["gain"].tolist(), strict=True))
    own = problem.conditions.temperature
    typical = gain["typical", own]
    assert gain["slow", own] - typical == pytest.approx(20.0 * math.log10(1.2 * math.sqrt(0.9)), abs=1e-6)
    assert gain["fast", own] - typical == pytest.approx(20.0 * math.log10(0.8 * math.sqrt(1.1)), abs=1e-6)
    warmer = 20.0 * math.log10((350.15 / 300.15) ** -0.75)
    assert gain["typical", 350.15] - typical == pytest.approx(warmer, abs=1e-6)
    assert found.measures["supply_current"] == pytest.approx(found.measures["supply_current"][0])


def test_the_record_of_the_corners_is_finite(tmp_path: Path) -> None:
    problem, sizes = given(tmp_path)
    found = at_corners(problem, sizes)
    record = json.loads(json.dumps(corners_record(found), allow_nan=False))
    assert [row["corner"] for row in record] == list(problem.process.corner_names)
    assert {tuple(row) for row in record} == {("corner", "temperature", "limits_met", "measures")}
    for row in record:
        assert list(row["measures"]) == list(found.measures)


def test_a_design_of_a_run_is_that_of_its_table(run_copy: Path) -> None:
    run_row = pick(run_copy, design=2)
    assert run_row.label == f"design 2 of {run_copy}"
    row = pd.read_csv(run_copy / "front.csv").set_index("design").loc[2]
    for name, value in run_row.sizes.items():
        column = next(c for c in row.index if c.split(" [")[0] == name)
        assert value == pytest.approx(np.array([row[column]]))
    assert run_row.problem.measure(run_row.sizes, ["gain"])["gain"][0] == pytest.approx(row["gain [dB]"], rel=1e-6)


REFUSALS = {
    "a problem without a sizing": (("stage.toml",), ["stage.toml: is a file, not a run", "--sizing"]),
    "a problem with both": (
        ("stage.toml", "--sizing", "hand.toml", "--design", "1"),
        ["--design and --sizing", "found both", "one of them"],
    ),
    "a run without a design": (("run",), ["found neither", "such as --design 1"]),
    "a run with both": (("run", "--design", "1", "--sizing", "hand.toml"), ["found both", "one of them is needed"]),
    "no such design": (("run", "--design", "9999"), ["--design: found 9999", "run has no such design", "1 to "]),
    "no such run": (("nowhere", "--design", "1"), ["nowhere: there is no such run"]),
    "no such sizing": (("stage.toml", "--sizing", "none.toml"), ["none.toml"]),
    "a sizing without a size": (("stage.toml", "--sizing", "poor.toml"), ["poor.toml", "sizes.input.width"]),
    "a sizing for no problem": (("hand.toml", "--sizing", "hand.toml"), ["hand.toml"]),
}


@pytest.mark.parametrize("command", ["spread", "corners"])
@pytest.mark.parametrize("case", REFUSALS)
def test_what_is_no_design_is_refused(cli: Cli, run_copy: Path, command: str, case: str) -> None:
    words, expected = REFUSALS[case]
    Path("stage.toml").write_text(CENTRED, encoding="utf-8")
    Path("hand.toml").write_text(SIZING, encoding="utf-8")
    Path("poor.toml").write_text(changed(SIZING, ("input.width", "")), encoding="utf-8")
    refused(cli, *expected, words=(command, *words))


@pytest.mark.parametrize(
    ("words", "expected"),
    [
        (("spread", "--measure", "gian"), ['"gian" is not a measure', '"gain"?']),
        (("spread", "--figure", "shape.gif"), ["--figure", "shape.gif", ".svg"]),
        (("corners", "--temperature", "warm"), ["--temperature", '"warm"']),
        (("corners", "--temperature", "85 V"), ["--temperature", '"85 V"']),
        (("corners", "--temperature", "900 K"), ["--temperature", '"900 K"', "150 K to 500 K"]),
        (("corners", "--temperature", "-300 degC"), ["--temperature", "-300 degC"]),
    ],
)
def test_options_that_are_wrong_are_refused(cli: Cli, words: tuple[str, ...], expected: list[str]) -> None:
    Path("stage.toml").write_text(CENTRED, encoding="utf-8")
    Path("hand.toml").write_text(SIZING, encoding="utf-8")
    command, *options = words
    refused(cli, *expected, words=(command, "stage.toml", "--sizing", "hand.toml", *options))


@pytest.mark.parametrize("option", [("--samples", "19"), ("--samples", "x"), ("--seed", "-1"), ("--threads", "0")])
def test_numbers_out_of_range_are_refused(cli: Cli, option: tuple[str, str]) -> None:
    Path("stage.toml").write_text(CENTRED, encoding="utf-8")
    Path("hand.toml").write_text(SIZING, encoding="utf-8")
    result = cli("spread", "stage.toml", "--sizing", "hand.toml", *option)
    assert (result.exit_code, result.stdout) == (2, "")
    assert option[0] in result.stderr


def test_the_spread_of_a_design_as_a_designer_asks_for_it(cli: Cli, run_copy: Path) -> None:
    words = ("spread", "run", "--design", "1", "--samples", "200", "--seed", "3")
    shown = cli(*words, "--json", "--measure", "input_noise")
    assert (shown.exit_code, shown.stderr) == (0, "")
    record = json.loads(shown.stdout)
    assert (record["samples"], record["seed"], record["unsolved"]) == (200, 3, 0)
    assert {"gain", "cmrr_mismatch", "offset_systematic", "input_noise"} <= set(record["measures"])
    assert record["yield"]["all limits"]["passed"] <= 200
    assert json.loads(cli(*words, "--json", "--measure", "input_noise", "--threads", "2").stdout) == record
    table = cli(*words, "--figure", "shape.svg")
    assert (table.exit_code, table.stderr) == (0, "")
    for word in ("200 samples of mismatch", "design 1 of run", "first order", "95 % interval", "all limits", "seed 3"):
        assert word in table.stdout
    assert Path("shape.svg").read_text(encoding="utf-8").lstrip().startswith("<?xml")


def test_the_corners_of_a_design_as_a_designer_asks_for_them(cli: Cli, run_copy: Path) -> None:
    shown = cli("corners", "run", "--design", "1", "--temperature", "85 degC", "--json")
    assert (shown.exit_code, shown.stderr) == (0, "")
    record = json.loads(shown.stdout)
    assert len({(row["corner"], row["temperature"]) for row in record}) == len(record)
    assert {row["temperature"] for row in record} == {300.15, 358.15}
    assert record[0]["limits_met"] is True  # a design of the front meets them where it was searched
    table = cli("corners", "run", "--design", "1")
    for word in ("typical 27 degC", "slow 27 degC", "limits", "met", "supply_current"):
        assert word in table.stdout
    assert CATALOGUE["gain"].name in table.stdout
