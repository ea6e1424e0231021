"""The table law against the law that its tables were sampled from, its file, and what lies between and beyond them.

Bounds are those of the table law's own purpose; no source.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from optisize.errors import InputError
from optisize.process.card import load_process
from optisize.process.ladder import Ladder
from optisize.process.law import Array, Law
from optisize.process.pinch import level, pinch_off
from optisize.process.spline import Axis, Box
from optisize.process.tabulated import BOXES, Condition, read_tables, write_tables
from tests.process.law_cases import NOMINAL, UT, process_of
from tests.process.tables import LENGTHS, SOURCE, TEXT, sampled_process, sampled_tables


def both(channel: str, length: Array, width: Array) -> tuple[Law, Law]:
    """Return the table law and the law that it was sampled from, of the same transistors."""
    table, source = process_of("sampled"), load_process(SOURCE)
    laws = [p.bind_law([channel], width, length, NOMINAL, "typical")[0] for p in (table, source)]
    return laws[0], laws[1]


def points(seed: int = 5, count: int = 2000) -> tuple[Array, Array, Array]:
    """Return gate, drain and source voltages over the bulk inside a supply of 1.8 V, the drain above the source."""
    rng = np.random.default_rng(seed)
    vs = rng.uniform(0.0, 1.0, (1, count))
    vd = vs + rng.uniform(0.01, 1.0, vs.shape) * (1.8 - vs)
    return vs + rng.uniform(0.0, 1.0, vs.shape) * (1.8 - vs), vd, vs


@pytest.mark.parametrize("channel", ["n", "p"])
def test_at_tabulated_lengths(channel: str) -> None:
    """Current, slopes, vdsat, capacitances and noise off the grid of voltages and widths, 95th percentile."""
    rng = np.random.default_rng(2)
    length, width = rng.choice(LENGTHS, (1, 2000)), 0.22e-6 * 40.0 ** rng.random((1, 2000))
    table, source = both(channel, length, width)
    v = points()
    got, wanted = table.drain(*v), source.drain(*v)
    on = wanted.id > 1e-12
    saturated = on & (v[1] - v[2] > source.saturation(*v).vdsat)
    for name, bound, where in (("id", 0.005, on), ("gm", 0.005, on), ("gds", 0.02, saturated), ("gms", 0.005, on)):
        error = np.abs(getattr(got, name) / getattr(wanted, name) - 1.0)[where]
        assert np.percentile(error, 95.0) < bound, name
    error = np.abs(table.saturation(*v).vdsat - source.saturation(*v).vdsat)[on]
    assert np.percentile(error, 95.0) < 4e-3
    strong = source.saturation(*v).inversion > 0.3
    one, other = table.capacitances(*v), source.capacitances(*v)
    whole = other.cgs + other.cgd + other.cgb
    for name in ("cgs", "cgd", "cgb"):
        error = np.abs(getattr(one, name) - getattr(other, name)) / whole
        assert np.percentile(error[strong], 95.0) < 0.04, name
    noise = table.noise_conductance(*v) / source.noise_conductance(*v) - 1.0
    assert np.percentile(np.abs(noise)[strong], 95.0) < 0.03


@pytest.mark.parametrize("channel", ["n", "p"])
def test_between_lengths(channel: str) -> None:
    rng = np.random.default_rng(3)
    length = LENGTHS[0] * (LENGTHS[-1] / LENGTHS[0]) ** rng.random((1, 2000))
    table, source = both(channel, length, np.full(length.shape, 5e-6))
    v = points()
    wanted = source.drain(*v)
    on = wanted.id > 1e-12
    assert np.percentile(np.abs(table.drain(*v).id / wanted.id - 1.0)[on], 95.0) < 0.02


def test_fingers_are_transistors_in_parallel() -> None:
    process = process_of("sampled")
    one, four = (
        process.bind_law(["n"], np.array([[w]]), np.array([[1e-6]]), NOMINAL, "typical", np.array([[f]]))[0]
        for w, f in ((2e-6, 1.0), (8e-6, 4.0))
    )
    v = np.array([[0.8]]), np.array([[1.0]]), np.array([[0.1]])
    np.testing.assert_allclose(four.drain(*v).id, 4.0 * one.drain(*v).id, rtol=1e-12)
    np.testing.assert_allclose(four.capacitances(*v).cgs, 4.0 * one.capacitances(*v).cgs, rtol=1e-12)


def test_junctions_and_flicker() -> None:
    table, source = both("n", np.array([[0.7e-6]]), np.array([[5e-6]]))
    process = load_process(SOURCE)
    parameters = process.transistor_arrays(["n"], NOMINAL, "typical")
    area, edge, reverse = np.array([[2e-12]]), np.array([[5e-6]]), np.array([[0.9]])
    np.testing.assert_allclose(
        table.junctions({}, area, edge, reverse), source.junctions(parameters, area, edge, reverse), rtol=0.01
    )
    v = np.array([[0.8]]), np.array([[1.0]]), np.array([[0.1]])
    sizes = np.array([[5e-6]]), np.array([[1.0]]), np.array([[0.7e-6]])
    own = process_of("sampled").transistor_arrays(["n"], NOMINAL, "typical")
    for frequency in (1.0, 1e4):
        got = table.flicker(own, table.drain(*v), v, sizes, frequency)
        wanted = source.flicker(parameters, source.drain(*v), v, sizes, frequency)
        np.testing.assert_allclose(got, wanted, rtol=0.01)


def test_mismatch_shifts_the_gate_and_scales_the_current() -> None:
    process = process_of("sampled")
    size = np.array([[10e-6]]), np.array([[1e-6]])
    parameters = process.transistor_arrays(["n"], NOMINAL, "typical")
    plain = process.law_of(parameters, *size, NOMINAL)
    parameters |= {"threshold": np.array([[5e-3]]), "current_factor": np.array([[1.01]])}
    moved = process.law_of(parameters, *size, NOMINAL)
    vg, vd, vs = np.array([[0.7]]), np.array([[1.2]]), np.array([[0.2]])
    np.testing.assert_allclose(moved.drain(vg + 5e-3, vd, vs).id, 1.01 * plain.drain(vg, vd, vs).id, rtol=1e-12)


def test_single_precision() -> None:
    law = process_of("sampled").bind_law(["n"], np.full((1, 500), 5e-6), np.full((1, 500), 0.7e-6), NOMINAL, "typical")[
        0
    ]
    v = points(count=500)
    one, single = law.drain(*v), law.single().drain(*(x.astype(np.float32) for x in v))
    assert single.id.dtype == single.gds.dtype == np.float32
    assert (np.abs(single.id / one.id - 1.0)[one.id > 1e-12] < 1e-3).all()


def test_outside() -> None:
    """Sizes and voltages beyond the tables are flagged, with a reason; a gate below them only turns the device off."""
    process = process_of("sampled")
    v = np.array([[0.5]]), np.array([[1.0]]), np.array([[0.1]])

    def law(width: float, length: float, fingers: float = 1.0) -> Law:
        arrays = np.array([[width]]), np.array([[length]])
        return process.bind_law(["n"], *arrays, NOMINAL, "typical", np.array([[fingers]]))[0]

    assert not law(5e-6, 1e-6).outside(*v).any()
    assert law(5e-6, 1e-6).why_outside(["tail"], *v) == []
    assert not law(5e-6, 1e-6).outside(v[0] - 2.0, v[1], v[2]).any()
    for strange, text in (
        (law(5e-6, 9e-6), "length 9 um of tail is not in the table (180 nm to 8 um)"),
        (law(50e-6, 1e-6), "finger width 50 um of tail is not in the table (220 nm to 10 um)"),
    ):
        assert strange.outside(*v).all()
        assert strange.why_outside(["tail"], *v) == [text]
    assert not law(50e-6, 1e-6, 5.0).outside(*v).any()
    assert law(5e-6, 1e-6).outside(v[0], v[1] + 2.0, v[2]).all()
    assert law(5e-6, 1e-6).why_outside(["tail"], v[0], v[1] + 2.0, v[2]) == [
        "vds 2.9 V of tail is beyond the table (1.98 V)"
    ]


def test_pinch_off_is_the_inverse_of_the_level() -> None:
    rng = np.random.default_rng(1)
    p, vds = rng.uniform(-1.5, 3.0, 5000), 10.0 ** rng.uniform(-3.3, 0.5, 5000)
    np.testing.assert_allclose(pinch_off(level(p, vds, UT), vds, UT), p, atol=1e-9)


@pytest.mark.parametrize("degree", [1, 2, 3])
@pytest.mark.parametrize("bend", [0.0, 0.3])
def test_a_spline_goes_through_its_samples_and_gives_polynomials_exactly(degree: int, bend: float) -> None:
    axis = Axis(-0.3, 1.7, 9, degree, bend)
    steps = np.arange(9.0)
    samples = 0.3 - 0.2 * steps + 0.05 * steps ** min(degree, 2) + (0.01 * steps**3 if degree == 3 else 0.0)
    other = Axis(0.0, 1.0, 4, 1)
    box = Box((axis, other, other))
    table = np.broadcast_to(samples[:, None, None], (9, 4, 4))
    flat, one = box.coefficients(table).ravel(), np.full(9, 0.5)
    nodes, weights = np.zeros((1, 9), dtype=np.intp), np.ones((1, 9))
    np.testing.assert_allclose(box.evaluate(flat, nodes, weights, (axis.samples, one, one)).value, samples, atol=1e-12)
    # Between the samples, in steps, the polynomial itself.
    v = np.random.default_rng(4).uniform(-0.3, 1.7, 9)
    t = axis.locate(v)[0]
    wanted = 0.3 - 0.2 * t + 0.05 * t ** min(degree, 2) + (0.01 * t**3 if degree == 3 else 0.0)
    np.testing.assert_allclose(box.evaluate(flat, nodes, weights, (v, one, one)).value, wanted, atol=1e-12)


def test_weights_between_sizes() -> None:
    """Exact for what is quadratic in 1/L on one side of an edge, and never across it."""
    samples = np.array([0.3, 0.4, 0.5, 0.8, 1.2, 3.0]) * 1e-6
    ladder = Ladder(samples, np.array([0.3, 0.5, 1.2, 3.0]) * 1e-6, 2)

    for low, high in ((0.3, 0.5), (0.55, 1.2)):
        x = np.linspace(low, high, 23)[1:] * 1e-6
        found = ladder.between(x)
        below = np.where(samples <= 0.5e-6, 1.0, 0.0)[found.rows]
        assert (below[:, x <= 0.5e-6][found.weight[:, x <= 0.5e-6] != 0.0] == 1.0).all()
        smooth = 2.0 - 1e-6 / samples + 0.3 * (1e-6 / samples) ** 2
        np.testing.assert_allclose(
            (smooth[found.rows] * found.weight).sum(axis=0), 2.0 - 1e-6 / x + 0.3 * (1e-6 / x) ** 2
        )
    at = ladder.between(samples)
    np.testing.assert_allclose((samples[at.rows] * at.weight).sum(axis=0), samples)
    assert (np.sort(np.abs(at.weight), axis=0)[:-1] == 0.0).all()
    assert ladder.reaches(np.array([0.2e-6, 0.3e-6, 3e-6, 3.1e-6])).tolist() == [False, True, True, False]


def test_a_sample_above_an_edge_is_of_what_is_above() -> None:
    samples, edges = np.array([1.0, 2.0, 2.02, 4.0]) * 1e-6, np.array([1.0, 2.0, 4.0]) * 1e-6
    found = Ladder(samples, edges, 2, shared=False).between(np.array([1.5e-6, 2e-6, 3e-6]))
    below = [set(found.rows[found.weight[:, k] != 0.0, k].tolist()) for k in range(3)]
    assert below == [{0, 1}, {1}, {2, 3}]


def test_the_file_gives_back_what_was_written(tmp_path: Path) -> None:
    conditions = (Condition("typical", NOMINAL), Condition("slow", 358.15))
    tables = sampled_tables(conditions)
    write_tables(tmp_path / "t.nc", tables)
    read = read_tables(tmp_path / "t.nc")
    assert read.conditions == conditions
    assert read.attributes["title"] == "sampled charge law"
    for condition in conditions:
        for channel in "np":
            one, other = tables.at(condition)[channel], read.at(condition)[channel]
            assert one.specific_current == other.specific_current
            for name, values in one.figures.items():
                np.testing.assert_allclose(other.figures[name], values, rtol=1e-6, atol=1e-7 * np.abs(values).max())
    for name in BOXES:
        for one, other in zip(getattr(tables.grids, name).axes, getattr(read.grids, name).axes, strict=True):
            np.testing.assert_allclose(other.samples, one.samples, rtol=1e-7)


def test_the_file_says_what_it_holds(tmp_path: Path) -> None:
    from scipy.io import netcdf_file

    path = sampled_process().with_suffix(".nc")
    with netcdf_file(path, "r", mmap=False) as file:
        for name, variable in file.variables.items():
            assert variable.units, name
            assert variable.long_name, name


def test_conditions_that_are_not_tabulated_are_refused() -> None:
    process = process_of("sampled")
    with pytest.raises(InputError, match="typical at 85 degC is not in the table; tabulated are typical at 27 degC"):
        process.surfaces("typical", 358.15)
    with pytest.raises(InputError, match='corner "slow" is not in the process; allowed are typical'):
        process.corner("slow")


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (('file = "sampled.nc"', 'file = "other.nc"'), "table.file: .*other.nc: there is no such table"),
        (('[table]\nfile = "sampled.nc"', ""), 'table: is missing; law "table" needs its file'),
        (('law   = "table"', 'law   = "charge"'), "nmos.*unknown key|is missing"),
        (
            ("[grid]", "[corners.slow]\nresistance = 1.1\n[grid]"),
            "corners.slow: is not in the table; tabulated are typical",
        ),
        (
            ('"4.5 mV*um"', '"4.5 mV*um"\nthreshold = "0.4 V"'),
            "nmos.threshold: unknown key; allowed are threshold_matching",
        ),
    ],
)
def test_a_wrong_process_file(change: tuple[str, str], message: str, tmp_path: Path) -> None:
    (tmp_path / "sampled.nc").write_bytes(sampled_process().with_suffix(".nc").read_bytes())
    path = tmp_path / "p.toml"
    path.write_text(TEXT.replace(*change), encoding="utf-8")
    with pytest.raises(InputError, match=message):
        load_process(path)


@pytest.mark.parametrize("content", [b"", b"CDF\x01", b"no table at all", b"half"])
def test_a_damaged_table(content: bytes, tmp_path: Path) -> None:
    whole = sampled_process().with_suffix(".nc").read_bytes()
    (tmp_path / "sampled.nc").write_bytes(whole[: len(whole) // 2] if content == b"half" else content)
    path = tmp_path / "p.toml"
    path.write_text(TEXT, encoding="utf-8")
    with pytest.raises(InputError, match=r"sampled\.nc"):
        load_process(path)
