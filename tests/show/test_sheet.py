"""Design sheets: every figure is that of the run, both files are whole, and texts of users are texts."""

from __future__ import annotations

import html
import json
import os
import re
import shutil
from dataclasses import replace
from itertools import combinations
from pathlib import Path

import numpy as np
import pytest
from matplotlib.backends.backend_agg import FigureCanvasAgg

from optisize.files import read_toml
from optisize.front.pick import Picked, pick
from optisize.front.run import Run, load_run
from optisize.front.table import measure_names, sizes_of, values_of
from optisize.problem.evaluate import Limit
from optisize.problem.own_measures import label
from optisize.process.law import Array
from optisize.quantities import read, write
from optisize.show.schematic_shapes import Box
from optisize.show.sheet import Sheet, Table, make_sheet
from optisize.show.sheet_html import sheet_html
from optisize.show.sheet_pdf import HEIGHT, WIDTH, pages_of, sheet_pdf
from optisize.show.terminal import CAUTION
from tests.conftest import Cli
from tests.problem.test_bad_input import refused
from tests.problem.texts import RESISTOR, SIZING, changed, loaded

ROOT = Path(__file__).parents[2]
DESIGN = 7
HOSTILE = '<script>alert("x")</script> & $\\frac{1}{2}$ \\alpha {0} %s <!-- --> 偏置'


@pytest.fixture(scope="module")
def run(finished_run: Path) -> Run:
    return load_run(finished_run)


@pytest.fixture(scope="module")
def sheet(finished_run: Path) -> Sheet:
    return make_sheet(pick(finished_run, DESIGN), finished_run, DESIGN)


def named(table: Table, column: str) -> dict[str, str]:
    """Return a column of a table by the names in its first one, each name of several."""
    i = table.headings.index(column)
    return {name: row[i] for row in table.rows for name in row[0].split(", ")}


def texts(sheet: Sheet) -> list[str]:
    """Return every text of a sheet."""
    pairs = [text for pair in (*sheet.facts, *sheet.origins) for text in pair]
    tables = [cell for t in (sheet.results, *sheet.tables) for line in (t.headings, *t.rows) for cell in line]
    titles = [t.title for t in (sheet.results, *sheet.tables)] + [t.note for t in sheet.tables]
    drawn = [line for shown in sheet.schematic.labels for line in shown.lines]
    whole = [sheet.title, sheet.design, sheet.date, sheet.caption, sheet.caution]
    return [text for text in (*pairs, *tables, *titles, *drawn, *whole) if text]


def design_values(run: Run) -> dict[str, float]:
    rows = run.front[run.front["design"] == DESIGN]
    return {name: float(v[0]) for name, v in values_of(run.problem, rows).items()}


def design_sizes(run: Run) -> dict[str, Array]:
    return sizes_of(run.problem, run.front[run.front["design"] == DESIGN])


def test_goals_and_limits_have_the_figures_of_the_front(run: Run, sheet: Sheet) -> None:
    values = design_values(run)
    wanted = [(label(g.measure), f"goal: {g.sense}", g.measure, "") for g in run.problem.goals]
    wanted += [
        (label(x.measure), f"{kind} {write(bound, x.measure.unit)}", x.measure, "met")
        for x in run.problem.limits
        for kind, bound in x.bounds
    ]
    assert sheet.results.rows == tuple((n, w, write(values[m.name], m.unit), met) for n, w, m, met in wanted)


def test_every_other_measure_stands_on_the_sheet_once(run: Run, sheet: Sheet) -> None:
    values, problem = design_values(run), run.problem
    shown = named(sheet.table("other measures"), "figure") | named(sheet.table("mismatch"), "figure")
    expected = {}
    for name in measure_names(problem):
        m = problem.find(name)
        of_mismatch = name in ("offset", "offset_sigma", "cmrr_mismatch", "common_mode_gain_sigma")
        if of_mismatch or name not in problem.needed:
            expected[label(m)] = write(values[name], m.unit)
    assert shown == {name: text for name, text in expected.items() if "unlimited" not in text}


def test_the_operating_point_is_that_of_the_measures(run: Run, sheet: Sheet) -> None:
    table = sheet.table("operating point")
    names = [t.name for t in run.problem.topology.transistors]
    assert [row[0] for row in table.rows] == names
    units = {"id": "A", "vgs": "V", "vds": "V", "vdsat": "V", "gm": "S", "gds": "S", "inversion": ""}
    for figure, unit in units.items():
        values = run.problem.measure(design_sizes(run), [f"{name}.{figure}" for name in names])
        assert named(table, figure) == {n: write(float(values[f"{n}.{figure}"][0]), unit, 3) for n in names}
    for row in table.rows:
        figure = dict(zip(table.headings, row, strict=True))
        read_of = {key: read(figure[key], unit) for key, unit in units.items()}
        assert read(figure["margin"], "V") == pytest.approx(read_of["vds"] - read_of["vdsat"], abs=2e-3)
        assert float(figure["gm/id [1/V]"]) == pytest.approx(read_of["gm"] / read_of["id"], rel=1e-2)


def test_what_is_drawn_has_the_sizes_of_the_front(run: Run, sheet: Sheet) -> None:
    sizes, table = {k: float(v[0]) for k, v in design_sizes(run).items()}, sheet.table("drawn transistors")
    for t in run.problem.topology.transistors:
        units, fingers = (int(named(table, key)[t.name]) for key in ("units", "fingers of a unit"))
        finger, length, whole = (
            read(named(table, key)[t.name], "m") for key in ("width of a finger", "length", "whole width")
        )
        assert units == (sizes[t.units] if t.units else 1)
        assert fingers * finger == pytest.approx(sizes[f"{t.group}.width"], rel=1e-12)
        assert whole == pytest.approx(units * fingers * finger, rel=1e-12)
        assert length == pytest.approx(sizes[f"{t.group}.length"], rel=1e-12)
    resistors = sheet.table("drawn resistors")
    for r in run.problem.topology.resistors:
        resistance = read(named(resistors, "resistance")[r.name], "ohm")
        assert resistance == pytest.approx(sizes[r.size], rel=1e-6)
        squares = float(named(resistors, "squares")[r.name])
        assert squares * run.problem.process.resistor.sheet_resistance == pytest.approx(resistance, rel=1e-5)
    for r in run.problem.space.ranges:
        shown = read(named(sheet.table("sizing"), "value")[r.size.name], r.size.unit)
        assert shown == pytest.approx(sizes[r.size.name], rel=1e-6)


def test_the_schematic_has_the_same_sizes_and_voltages(run: Run, sheet: Sheet) -> None:
    lines = {shown.lines[0]: shown.lines[1:] for shown in sheet.schematic.labels if shown.bold}
    table = sheet.table("drawn transistors")
    for t in run.problem.topology.transistors:
        units, fingers = named(table, "units")[t.name], named(table, "fingers of a unit")[t.name]
        finger, length = named(table, "width of a finger")[t.name], named(table, "length")[t.name]
        assert " ".join(lines[t.name]).endswith(f"{fingers} x {finger} / {length}")
        assert (f"{units} units of" in lines[t.name]) == (int(units) > 1)
    assert lines["bias.current"] == (named(sheet.table("sizing"), "value")["bias.current"],)
    found = named(sheet.table("operating point"), "vgs")
    middle = run.problem.conditions.middle
    tail = middle - read(found["input.p"], "V")
    muted = [read(shown.lines[0], "V") for shown in sheet.schematic.labels if shown.muted]
    assert any(voltage == pytest.approx(tail, abs=1e-3) for voltage in muted)
    assert any(voltage == pytest.approx(read(found["bias"], "V"), abs=1e-3) for voltage in muted)
    assert f"in+  {write(middle, 'V')}" in [line for shown in sheet.schematic.labels for line in shown.lines]


def test_the_origins_are_those_of_the_run(finished_run: Path, run: Run, sheet: Sheet) -> None:
    origins = dict(sheet.origins)
    info = json.loads((finished_run / "run.json").read_text(encoding="utf-8"))
    for name, digest in info["sha256"].items():
        assert origins[f"SHA-256 of the {name}"] == digest
    assert f"optisize {info['optisize']}" in origins["versions"]
    assert origins["SPICE deck"] == f"optisize deck {finished_run} --design {DESIGN} --to design-{DESIGN}.sp"
    assert sheet.caution == CAUTION


def test_both_files_hold_every_text(sheet: Sheet) -> None:
    page = html.unescape(re.sub(r"<[^>]*>", "\n", sheet_html(sheet).split("</style>")[1]))
    written = " ".join(t.get_text() for figure in pages_of(sheet) for t in figure.axes[0].texts)
    for text in texts(sheet):
        assert text in page, text
        assert text in written, text


@pytest.mark.filterwarnings("ignore:Glyph .* missing from font")
def test_a_hostile_title_is_shown_as_text(sheet: Sheet) -> None:
    hostile = replace(sheet, title=HOSTILE, design=f"design 1 of {HOSTILE}")
    page = sheet_html(hostile)
    assert "<script" not in page
    assert page.count(html.escape(HOSTILE)) == 4  # title, heading, and twice the design
    pages = pages_of(hostile)
    assert HOSTILE in [t.get_text() for t in pages[0].axes[0].texts]
    assert not any(t.get_parse_math() for figure in pages for t in figure.axes[0].texts)
    assert sheet_pdf(hostile).startswith(b"%PDF")


def test_the_page_needs_nothing_else_and_runs_nothing(sheet: Sheet) -> None:
    page = sheet_html(sheet)
    for word in ("http:", "https:", "<script", "src=", "href=", "@import", "url("):
        assert word not in page
    assert "default-src 'none'" in page
    assert page.count("<svg") == 1
    assert "prefers-color-scheme: dark" in page
    assert "size: A4" in page


def crowded(run: Run, tmp_path: Path) -> Sheet:
    """A sheet with all that can be long: the largest stage, a title of 200 letters, many limits."""
    text = (ROOT / "problems" / "low-supply-telescopic.toml").read_text(encoding="utf-8")
    edits = [('tail   = "single"', 'tail   = "cascode"'), ("title", f'title = "{"Wide words MW " * 14}"')]
    sizes = 'tail.cascode.width = "60 um"\ntail.cascode.length = "0.1 um"\n'
    sizes += 'tail.cascode.bias.width = "2 um"\ntail.cascode.bias.length = "2 um"\n'
    problem = loaded(tmp_path, changed(text, *edits, ("[goals]", f"{sizes}\n[goals]")))
    names = [f"{t.name}.{figure}" for t in problem.topology.transistors for figure in ("vds", "id")]
    limits = tuple(Limit(problem.find(name), 1e-9, None) for name in names)
    problem = replace(problem, limits=(*problem.limits, *limits), process_name="/a/long/path" * 12)
    middle = {r.size.name: [(r.low * r.high) ** 0.5] for r in problem.space.ranges}
    values = problem.space.snapped({name: np.array(v) for name, v in middle.items()})
    return make_sheet(Picked(problem, values, f"design 1 of {'a/long/path/' * 16}"), tmp_path, 1)


def test_a_crowded_sheet_fits_on_two_pages_and_no_text_meets_another(run: Run, tmp_path: Path) -> None:
    made = crowded(run, tmp_path)
    assert len(made.results.rows) >= 40
    assert pages_in(sheet_pdf(made)) == 2
    check_pages(made, smallest=2.4)


def test_a_usual_sheet_is_legible_and_no_text_meets_another(sheet: Sheet) -> None:
    assert pages_in(sheet_pdf(sheet)) == 2
    check_pages(sheet, smallest=6.4)


def pages_in(pdf: bytes) -> int:
    return len(re.findall(rb"/Type /Page\b", pdf))


def check_pages(made: Sheet, smallest: float) -> None:
    """Hold the texts of both pages against the paper, each other and the smallest letters [points]."""
    for figure in pages_of(made):
        figure.set_dpi(144)
        renderer = FigureCanvasAgg(figure).get_renderer()
        boxes = []
        for text in figure.axes[0].texts:
            extent = text.get_window_extent(renderer).transformed(figure.axes[0].transData.inverted())
            size = float(text.get_fontsize())
            assert size >= smallest, text.get_text()
            assert 0.0 < extent.x0 < extent.x1 < WIDTH, text.get_text()
            assert 0.0 < extent.y0 < extent.y1 < HEIGHT, text.get_text()
            if text.get_text():  # letters alone: lines may stand closer than their ascents and descents
                box = Box(extent.x0, extent.y0 + 0.2 * size, extent.x1, extent.y1 - 0.1 * size)
                boxes.append((text.get_text(), box))
            assert text.get_color() in ("0", "0.35")  # black and grey
        for (one, a), (other, b) in combinations(boxes, 2):
            assert not a.overlaps(b), (one, other)


def test_both_files_go_into_the_run_and_are_made_again(cli: Cli, run_copy: Path) -> None:
    (run_copy / "sheet-3.pdf").write_text("an older sheet", encoding="utf-8")
    result = cli("sheet", "run", "--design", "3")
    assert result.exit_code == 0, result.stderr
    assert result.stdout.split() == ["run/sheet-3.pdf", "run/sheet-3.html"]
    assert Path("run/sheet-3.pdf").read_bytes().startswith(b"%PDF")
    assert "Design sheet of design 3 of run" in Path("run/sheet-3.html").read_text(encoding="utf-8")
    assert not [p for p in run_copy.iterdir() if p.name.startswith(".")]


def test_a_suffix_chooses_and_a_directory_takes_both(cli: Cli, run_copy: Path) -> None:
    assert run_copy.is_dir()
    Path("there").mkdir()
    assert cli("sheet", "run", "--design", "1", "--to", "one.html").stdout == "one.html\n"
    assert cli("sheet", "run", "--design", "1", "--to", "one.pdf").stdout == "one.pdf\n"
    assert cli("sheet", "run", "--design", "1", "--to", "there").stdout == "there/sheet-1.pdf\nthere/sheet-1.html\n"
    assert not list(run_copy.glob("sheet*"))


def test_a_sizing_by_hand_has_a_sheet_beside_it(cli: Cli) -> None:
    Path("stage.toml").write_text(RESISTOR, encoding="utf-8")
    Path("hand").mkdir()
    Path("hand/mine.toml").write_text(SIZING, encoding="utf-8")
    result = cli("sheet", "stage.toml", "--sizing", "hand/mine.toml")
    assert result.stdout.split() == ["hand/sheet-mine.pdf", "hand/sheet-mine.html"]
    page = Path("hand/sheet-mine.html").read_text(encoding="utf-8")
    assert "optisize deck stage.toml --sizing hand/mine.toml --to mine.sp" in page
    assert "SHA-256 of the sizing" in page
    assert "2 units of" in page
    assert "MISSED" in page  # a sizing by hand need not meet its limits


def test_wrong_input_is_one_line(cli: Cli, run_copy: Path) -> None:
    def wrong(*words: str, expect: tuple[str, ...]) -> None:
        refused(cli, *expect, words=("sheet", "run", *words))

    assert run_copy.is_dir()
    wrong(expect=("--design and --sizing", "neither"))
    wrong("--design", "999", expect=("found 999", "its designs are 1 to"))
    wrong("--design", "1", "--to", "a.htm", expect=('"a.htm"', ".pdf or .html", 'mean ".html"?'))
    Path("a.pdf").write_text("mine", encoding="utf-8")
    wrong("--design", "1", "--to", "a.pdf", expect=("a.pdf", "already exists"))
    hopeless = changed(SIZING, ("load.resistance", 'load.resistance = "2 Mohm"'), ("tail.units", "tail.units = 16"))
    hopeless = changed(hopeless, ("bias.current", 'bias.current = "20 mA"'))
    Path("hopeless.toml").write_text(hopeless, encoding="utf-8")
    wrong("--sizing", "hopeless.toml", expect=("hopeless.toml", "operating point"))
    assert Path("a.pdf").read_text(encoding="utf-8") == "mine"


def test_nothing_is_left_of_a_file_that_cannot_be_written(
    cli: Cli, run_copy: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def full(*_: object) -> None:
        raise OSError(28, "No space left on device")

    before = sorted(run_copy.iterdir())
    monkeypatch.setattr(os, "replace", full)
    result = cli("sheet", "run", "--design", "1")
    assert result.exit_code == 1
    assert result.stderr == "optisize: run/sheet-1.pdf: cannot be written: No space left on device\n"
    assert sorted(run_copy.iterdir()) == before


SHIPPED = sorted((ROOT / "problems").glob("*.toml"))


@pytest.mark.parametrize("problem", SHIPPED, ids=lambda path: path.stem)
def test_every_shipped_problem_has_sheets(cli: Cli, problem: Path, request: pytest.FixtureRequest) -> None:
    shutil.copy(problem, "problem.toml")
    if read_toml(problem)["process"] == "process/open.toml":
        Path("process").symlink_to(request.getfixturevalue("open_process").parent)
    words = ("--to", "run", "--population", "40", "--generations", "20", "--no-figures", "--quiet")
    assert cli("search", "problem.toml", *words).exit_code == 0
    result = cli("sheet", "run", "--design", "1")
    assert result.exit_code == 0, result.stderr
    made = make_sheet(pick(Path("run"), 1), Path("run"), 1)
    assert {row[-1] for row in made.results.rows} == {"", "met"}
    check_pages(made, smallest=5.4)
    assert pages_in(Path("run/sheet-1.pdf").read_bytes()) == 2
