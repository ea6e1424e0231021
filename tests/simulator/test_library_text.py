"""What the text of a model library says: sections, files, limits, and how its transistors are called."""

from __future__ import annotations

import hashlib
from pathlib import Path

import numpy as np
import pytest

from optisize.errors import InputError
from optisize.process.library import Library, LibraryDevice
from optisize.simulator.limits import Limits, model_limits, number, read_library
from optisize.simulator.plan import default_lengths, default_widths, few_lengths, few_widths, grids, sizes
from optisize.simulator.recognise import models, names, oxide, recognised
from tests.simulator.libraries import PARTS, write_library

BINNED = """\
.model big.0 nmos
+ lmin = 2.8e-007 lmax = 5e-007
+ wmin = 2.2e-007 wmax = 1.0u  $ the rest
+ toxe = 8e-009
.model big.1 nmos
+ lmin = 5e-007 lmax = 1.0001e-05 wmin=2.2e-007 wmax=1u
.model bigger.0 nmos lmin=1e-7 lmax=1
"""
EDGES = np.array([0.28, 0.5, 1.2, 10.0, 50.001]) * 1e-6


def test_sections_files_and_hash(tmp_path: Path) -> None:
    path = write_library(tmp_path)
    text = read_library(path, ["start", "tt"])
    assert [file.name for file in text.files] == ["all.lib", "more.lib", "parts.lib"]
    whole = b"".join((tmp_path / name).read_bytes() for name in ("all.lib", "more.lib", "parts.lib"))
    assert text.sha256 == hashlib.sha256(whole).hexdigest()
    assert ".param vtn=0.6 vtp=-0.7" in text.lines
    assert ".param vtn=0.7 vtp=-0.8" not in text.lines
    assert names(text) == ["nch", "pch", "inside_n", "inside_p", "bare_n"]
    assert models(text) == ["inside_n", "inside_p", "bare_n"]
    assert oxide("inside_n", text) == pytest.approx(7.5e-9)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (lambda p: ["tx"], 'has no section "tx"; allowed are start, tt, ss, broken; did you mean "tt"?'),
        (lambda p: (p / "parts.lib").unlink(), "parts.lib: there is no such file of the model library"),
        (lambda p: (p / "parts.lib").write_bytes(b"\0\1\2"), "parts.lib: is not a text file"),
        (lambda p: (p / "parts.lib").write_text(".lib other\n.endl\n"), 'parts.lib: has no section "both"'),
        (lambda p: (p / "parts.lib").write_text('.lib both\n.lib "parts.lib" both\n.endl\n'), "refers to itself"),
    ],
)
def test_what_is_not_there(change, message: str, tmp_path: Path) -> None:  # type: ignore[no-untyped-def]
    path = write_library(tmp_path)
    sections = change(tmp_path)
    with pytest.raises(InputError) as error:
        read_library(path, sections if isinstance(sections, list) else ["tt"])
    assert message in str(error.value)


def test_a_directory_is_no_library(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="is a directory"):
        read_library(tmp_path, [""])


def test_numbers_as_spice_writes_them() -> None:
    for text, value in (("2.8e-007", 2.8e-7), ("0.28u", 0.28e-6), ("1meg", 1e6), ("'5n'", 5e-9), ("-3", -3.0)):
        assert number(text) == pytest.approx(value)
    assert number("vtn+1") is None
    assert number("") is None


def test_limits_of_a_binned_model(tmp_path: Path) -> None:
    (tmp_path / "bins.lib").write_text(BINNED, encoding="ascii")
    text = read_library(tmp_path / "bins.lib", [""])
    limits = model_limits(text, "BIG")
    np.testing.assert_allclose(limits.lengths, [2.8e-7, 5e-7, 1.0001e-5])
    np.testing.assert_allclose(limits.widths, [2.2e-7, 1e-6])
    assert oxide("big", text) == pytest.approx(8e-9)
    assert len(model_limits(text, "other").lengths) == 0


def test_how_a_transistor_is_called(tmp_path: Path) -> None:
    text = read_library(write_library(tmp_path), ["start", "tt"])
    n, p, bare = (recognised(LibraryDevice(name=name), text) for name in ("nch", "PCH", "bare_n"))
    assert (n.kind, n.inner, n.terminals, n.fingers, n.drain_area) == ("subcircuit", "m0", "dgsb", "nf", "ad")
    assert (p.kind, p.inner, p.terminals, p.fingers, p.drain_area) == ("subcircuit", "mcore", "gsdb", "", "")
    assert (bare.kind, bare.fingers, bare.drain_area) == ("model", "", "ad")
    nodes = dict(zip("dgsb", ("d", "g", "s", "0"), strict=True))
    shape = {"width": 2e-6, "length": 1e-6, "multiple": 3.0, "drain_area": 1e-12, "drain_edge": 2e-6}
    assert n.call("1", nodes, shape) == "x1 d g s 0 nch w=2e-06 l=1e-06 ad=1e-12 as=0 pd=4e-06 ps=2e-06 nf=1 m=3"
    assert p.call("1", nodes, shape, unit=1e-6) == "x1 g s d 0 PCH w=2 l=1 m=3"
    assert bare.vector("1", "id") == "@m1[id]"
    assert n.vector("1", "gm") == "@m.x1.m0[gm]"


def test_a_library_is_found_beside_its_process_file(tmp_path: Path) -> None:
    data = {"path": "models/all.lib", "sections": {"typical": ""}, "nmos": {"name": "n"}, "pmos": {"name": "p"}}
    library = Library.model_validate(data)
    assert library.beside(tmp_path).path == tmp_path / "models" / "all.lib"
    assert library.beside(tmp_path).includes("typical") == [f'.include "{tmp_path / "models" / "all.lib"}"']
    assert library.record() == data | {"sections": {"typical": ""}}
    with pytest.raises(InputError, match='corner "slow" has no section of the library; allowed are typical'):
        library.section_of("slow")


def test_default_sizes() -> None:
    """Every edge, and enough between them; edges a hair beyond a round size are that size."""
    lengths, widths = default_lengths(EDGES), default_widths(np.array([0.22, 0.5, 1.2, 10.0, 100.001]) * 1e-6)
    assert 12 <= len(lengths) <= 16
    assert {0.28e-6, 0.5e-6, 1.2e-6, 10e-6, 50e-6} <= set(lengths)
    assert (widths[0], widths[-1]) == (0.22e-6, 50e-6)
    assert {0.5e-6, 1.2e-6, 10e-6} <= set(widths)
    steps = -np.diff(1.0 / widths) * widths[0]
    assert steps.max() < 0.21
    small = few_lengths(lengths, EDGES)
    assert set(small) > set(lengths)
    assert len(small) == len(lengths) + 3
    assert len(few_widths(widths, np.array([0.22, 0.5, 1.2, 10.0, 100.0]) * 1e-6)) == 4
    assert len(few_widths(widths, np.array([0.22, 100.0]) * 1e-6)) == 3


def test_sizes_of_the_designers_choice() -> None:
    limits = Limits(EDGES, np.array([0.22e-6, 100e-6]))
    chosen = sizes(limits, [1e-6, 0.5e-6], [], "nch")
    assert chosen.lengths.tolist() == [0.5e-6, 1e-6]
    with pytest.raises(InputError, match=r"--lengths: found 100 nm; the model of nch holds from 280 nm to 50 um"):
        sizes(limits, [0.1e-6], [], "nch")
    with pytest.raises(InputError, match=r"nch: its model does not say between which widths it holds; .* --widths"):
        sizes(Limits(EDGES, np.empty(0)), [], [], "nch")


@pytest.mark.parametrize("supply", [0.8, 1.8, 5.0])
def test_voltages(supply: float) -> None:
    grid = grids(supply)
    for box in (grid.current, grid.vdsat, grid.leak, grid.gate, grid.noise):
        gate, drain, body = box.axes
        assert gate.high == drain.high == body.high == pytest.approx(1.1 * supply)
        assert gate.low < 0.0 < drain.low < 1e-3
        assert body.low < 0.0
    gate, drain, body = (axis.samples for axis in grid.current.axes)
    sampled = gate[:, None, None] + 10.0 * drain[:, None] + 100.0 * body
    for box in (grid.vdsat, grid.leak):
        gate, drain, body = (axis.samples for axis in box.axes)
        expected = gate[:, None, None] + 10.0 * drain[:, None] + 100.0 * body
        np.testing.assert_allclose(grid.thinned(sampled, box), expected)


def test_the_text_of_the_tests_own_library_is_as_it_is_said(tmp_path: Path) -> None:
    assert read_library(write_library(tmp_path), ["tt"]).lines[-1] == PARTS.splitlines()[-2]
