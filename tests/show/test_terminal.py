"""What is printed: whole figures whatever the width, and nothing that a terminal would act upon."""

from __future__ import annotations

import json
from pathlib import Path

import pytest
from rich.console import Console

from optisize.front.run import load_run
from optisize.show import terminal
from optisize.show.terminal import json_number, print_front, print_table
from tests.conftest import Cli
from tests.problem.texts import PROCESS, RESISTOR, SIZING, changed

HOSTILE = {
    "markup": "[red]red[/red] [/] [link=x]",
    "script": "<script>alert(1)</script> & \"'",
    "mathematics": r"$x^2$ \frac{1}{2} and $\bad{$",
    "newline": "one\ntwo\r\nthree\ttabs",
    "control": "\x1b[31mred\x1b]0;title\x07\x08\u202e",
    "letters": "Ω µ 电路 🙂",
    "braces": "{title} {0} %s %(x)s",
    "empty": "",
}


@pytest.mark.parametrize("name", HOSTILE)
def test_a_hostile_title_is_printed_safely_everywhere(cli: Cli, name: str) -> None:
    title = HOSTILE[name]
    text = changed(RESISTOR, ("title", f"title = {json.dumps(title, ensure_ascii=False)}"))
    Path("stage.toml").write_text(text, encoding="utf-8")
    Path("hand.toml").write_text(
        changed(SIZING, ("title", f"title = {json.dumps(title, ensure_ascii=False)}")), encoding="utf-8"
    )
    result = cli("search", "stage.toml", "--to", "run", "--quiet", "--no-figures")
    assert result.exit_code == 0, result.stderr
    outputs = [result.stdout, cli("front", "run").stdout, cli("assess", "stage.toml", "hand.toml").stdout]
    for output in outputs:
        assert all(c.isprintable() or c == "\n" for c in output)
    expected = "".join(c if c.isprintable() else "?" for c in title)
    assert outputs[0].splitlines()[0] == expected
    assert outputs[1].splitlines()[0].startswith(f"{expected}: ")
    assert load_run("run").problem.title == title
    assert json.loads(Path("run/run.json").read_text(encoding="utf-8"))["title"] == title
    if name not in ("mathematics", "letters", "control"):
        return  # nothing in them that a figure would act upon
    drawn = cli("plot", "run", "--format", "svg")
    assert (drawn.exit_code, drawn.stderr) == (0, "")


def test_a_hostile_process_file_is_shown_safely(cli: Cli) -> None:
    text = changed(PROCESS, ("title", 'title = "[red]\\u001b[31m\\n"'), ("note", 'note = "[/bold] $x$"'))
    Path("odd.toml").write_text(text, encoding="utf-8")
    result = cli("process", "show", "odd.toml")
    assert result.exit_code == 0, result.stderr
    assert all(c.isprintable() or c == "\n" for c in result.stdout)
    assert result.stdout.splitlines()[0] == "odd.toml: [red]?[31m?; [/bold] $x$"


def _shown(monkeypatch: pytest.MonkeyPatch, run: Path, width: int) -> str:
    out = Console(force_terminal=True, no_color=True, width=width, record=True, highlight=False)
    monkeypatch.setattr(terminal, "console", lambda width=0: out)
    loaded = load_run(run)
    print_front(loaded, loaded.front)
    return out.export_text()


@pytest.mark.parametrize("width", [40, 80, 120, 200, 1000])
def test_no_figure_is_cut_in_a_narrow_terminal(
    finished_run: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str], width: int
) -> None:
    wide = _shown(monkeypatch, finished_run, 1000).splitlines()[1:]
    text = _shown(monkeypatch, finished_run, width)
    lines = text.splitlines()[1:]
    assert max(len(line.rstrip()) for line in lines) <= width
    count = len(wide)
    blocks = [lines[i : i + count] for i in range(0, len(lines), count)]
    for row, line in enumerate(wide):
        first, *cells = _cells(line)
        parts = [_cells(block[row]) for block in blocks]
        assert {part[0] for part in parts} == {first}
        assert [cell for part in parts for cell in part[1:]] == cells


def _cells(line: str) -> list[str]:
    return [cell.strip() for cell in line.split("  ") if cell.strip()]


def test_lines_are_whole_when_it_is_no_terminal(capsys: pytest.CaptureFixture[str]) -> None:
    headings = [f"column{i}" for i in range(60)]
    print_table("wide", headings, [[f"{i} value" for i in range(60)]])
    lines = capsys.readouterr().out.splitlines()
    assert len(lines) == 3
    assert lines[1].split() == headings
    assert "59 value" in lines[2]


def test_numbers_of_json() -> None:
    assert json_number(float("inf")) == "unlimited"
    assert json_number(float("-inf")) == "-unlimited"
    assert json_number(float("nan")) is None
    assert json_number(1.5) == 1.5


def test_catalogues_name_every_measure_and_process(cli: Cli) -> None:
    from optisize.process.card import built_in_names
    from optisize.stage.measures import CATALOGUE, FIGURES

    shown, records = cli("measures").stdout, json.loads(cli("measures", "--json").stdout)
    assert {r["name"] for r in records} == {*CATALOGUE, *FIGURES}
    assert all(r["definition"] and r["source"] and r["better"] in ("max", "min") for r in records)
    assert all(name in shown for name in CATALOGUE)
    assert all({"parameters"} < set(r) for r in records)
    shown, records = cli("process", "list").stdout, json.loads(cli("process", "list", "--json").stdout)
    assert [r["name"] for r in records] == list(built_in_names())
    assert all(name in shown for name in built_in_names())


@pytest.mark.usefixtures("humming")
def test_the_catalogue_lists_parameters_with_their_defaults(cli: Cli) -> None:
    shown = " ".join(cli("measures").stdout.split())
    assert "As tests need it. Parameter: frequency = 1 kHz (where it is taken). (no source)" in shown
    assert "Parameter: band = 1 Hz to 100 kHz (from where to where). (no source)" in shown
    assert "Parameters: sigmas = 3 (how many); frequency = 1 MHz (where it is taken). (no source)" in shown
    records = {r["name"]: r["parameters"] for r in json.loads(cli("measures", "--json").stdout)}
    assert records["gain"] == []
    assert records["hum_total"] == [
        {
            "name": "band",
            "unit": "Hz",
            "meaning": "from where to where",
            "default": [1.0, 1e5],
            "low": 1e-3,
            "high": 1e12,
        }
    ]


@pytest.mark.parametrize("name", ["generic-180", "generic-65", "handbook"])
def test_a_process_is_shown_with_every_parameter(cli: Cli, name: str) -> None:
    shown, record = cli("process", "show", name).stdout, json.loads(cli("process", "show", name, "--json").stdout)
    for table in ("nmos", "pmos", "grid", "resistor"):
        for key in record[table]:
            assert f"{table}.{key}" in shown
    for c in record["characteristics"]:
        assert len(c["inversion"]) == len(c["gm_over_id"]) == len(c["transit_frequency"]) > 3
        assert c["gm_over_id"] == sorted(c["gm_over_id"], reverse=True)


def test_cells_are_printed_safely(capsys: pytest.CaptureFixture[str]) -> None:
    print_table("\ntitle", ["[b]name[/b]\x1b"], [["[red]a[/red]\x1b[31m\n"]])
    assert [line.rstrip() for line in capsys.readouterr().out.splitlines()] == [
        "",
        "title",
        "[b]name[/b]?",
        "[red]a[/red]?[31m?",
    ]
