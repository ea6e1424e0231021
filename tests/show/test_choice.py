"""The card of a chosen design as it is printed and as plain data."""

from __future__ import annotations

import io
import json
from pathlib import Path

import numpy as np
import pytest
from rich.console import Console

from optisize.front.run import load_run
from optisize.front.wish import short_list
from optisize.show import terminal
from optisize.show.choice import choice_record, print_choice, print_short_list
from tests.conftest import Cli
from tests.problem.texts import IDEAL, MIRROR, RESISTOR, changed


def test_a_hostile_title_is_printed_safely(cli: Cli, run_copy: Path) -> None:
    title = "[red]x[/red] [/] \x1b[31m\u202e <b>"
    text = changed(RESISTOR, ("title", f"title = {json.dumps(title)}"))
    Path("run/problem.toml").write_text(text, encoding="utf-8")
    for words in ((), ("--short", "3"), ("--wish", "gain=99 dB")):
        result = cli("choose", "run", *words)
        assert all(c.isprintable() or c == "\n" for c in result.stdout + result.stderr)
        assert "[red]x[/red] [/] ?[31m? <b>" in result.stdout
    cli("choose", "run", "--save", "x.toml")
    assert "\x1b" not in Path("x.toml").read_text(encoding="utf-8")


@pytest.mark.parametrize("width", [40, 80, 200])
def test_nothing_is_cut_in_a_narrow_terminal(finished_run: Path, monkeypatch: pytest.MonkeyPatch, width: int) -> None:
    run = load_run(finished_run)
    out = Console(force_terminal=True, no_color=True, width=width, record=True, highlight=False, file=io.StringIO())
    for place in (terminal,):
        monkeypatch.setattr(place, "console", lambda width=0: out)
    monkeypatch.setattr("optisize.show.choice.console", lambda width=0: out)
    choice = run.choose()
    print_choice(choice)
    print_short_list(run, short_list(run, 4))
    text = out.export_text()
    assert "…" not in text
    for name in ("input.p", "bias.current", "bandwidth", "supply_current (min)"):
        assert name in " ".join(text.split())


def test_places_reach_from_the_worst_to_the_best_of_the_front(finished_run: Path) -> None:
    run = load_run(finished_run)
    best = choice_record(run.choose(most="gain"))["goals"]
    assert best[0]["place"] == 1.0
    assert best[0]["value"] == best[0]["best"] == run.front["gain [dB]"].max()
    assert best[2]["worst"] == run.front["supply_current [A]"].max()


def test_simulated_figures_stand_beside_the_predicted(run_copy: Path, cli: Cli) -> None:
    run = load_run(run_copy)
    run.front["simulated gain [dB]"] = run.front["gain [dB]"] + 0.25
    run.front.loc[run.front.index[5:], "simulated gain [dB]"] = np.nan
    run.save(run_copy, replace=True)
    shown = cli("choose", "run", "--where", "design=1")
    assert "simulated" in shown.stdout
    report = json.loads(cli("choose", "run", "--where", "design=1", "--json").stdout)
    assert report["simulated"] == {"gain": pytest.approx(report["measures"]["gain"] + 0.25)}
    assert "simulated" not in json.loads(cli("choose", "run", "--where", "design=9", "--json").stdout)


@pytest.mark.parametrize("kind", ["mirror", "ideal"])
def test_every_kind_of_stage_has_a_card(cli: Cli, kind: str) -> None:
    """With an ideal tail there is no tail to draw, and rejection is unlimited."""
    text = changed(IDEAL, ("cmrr", "")) if kind == "ideal" else MIRROR
    Path("stage.toml").write_text(text, encoding="utf-8")
    words = ("--population", "16", "--generations", "30", "--no-figures", "--quiet")
    result = cli("search", "stage.toml", "--to", "run", *words)
    assert result.exit_code == 0, result.stderr
    for asked in ((), ("--most", "cmrr"), ("--least", "area"), ("--wish", "cmrr=60 dB")):
        result = cli("choose", "run", *asked)
        assert result.exit_code in (0, 3), result.stderr
        assert "as drawn on the process grid" in result.stdout
        assert json.loads(cli("choose", "run", *asked, "--json").stdout)["design"] >= 1
