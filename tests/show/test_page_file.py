"""The file of a page: what it carries, that it cannot be broken out of, and when it is written."""

from __future__ import annotations

import base64
import gzip
import json
import re
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from optisize.commands.simulate import _save as save_resimulated
from optisize.errors import OptisizeError
from optisize.front.run import Run, load_run
from optisize.show.page import embedded, filled, library, write_page
from optisize.show.page_record import page_record
from optisize.show.page_views import place_columns, view_axes
from tests.conftest import Cli
from tests.problem.test_bad_input import refused
from tests.show.browsing import HOSTILE

MEGABYTE = 1_000_000


def record(text: str) -> dict[str, Any]:
    """Return the data that a page carries."""
    found = re.search(r'id="record">(.*?)</script>', text, re.DOTALL)
    assert found
    return dict(json.loads(found.group(1)))


def test_the_page_is_small_and_asks_for_nothing(file: Path) -> None:
    text = file.read_text(encoding="utf-8")
    assert file.stat().st_size < 4 * MEGABYTE
    own = text.replace(library(), "")
    assert len(own) < MEGABYTE  # what is left is the page's own
    assert not re.search(r"(?:src|href)\s*=\s*[\"']?(?:https?:)?//", own)
    assert "not a sign-off" in record(text)["caution"]


def test_every_deck_of_the_page_is_that_of_the_command(cli: Cli, run_copy: Path) -> None:
    assert cli("page", "run").exit_code == 0
    carried = record(Path("run/page.html").read_text(encoding="utf-8"))
    decks = json.loads(gzip.decompress(base64.b64decode(carried["decks"])))
    assert len(decks) == len(carried["designs"])
    for number in (1, len(decks)):
        assert decks[number - 1] == cli("deck", "run", "--design", str(number)).stdout


def test_what_is_embedded_cannot_end_a_script_and_comes_back() -> None:
    for text in (HOSTILE, "<!--", "]]>", "\u2028\u2029", "\\u003c", "ü√"):
        held = embedded({"x": text})
        assert not set(held) & set("<>&\u2028\u2029")
        assert json.loads(held)["x"] == text
    assert filled("<!--a--> <!--b-->", {"a": "<!--b-->", "b": "\\1"}) == "<!--b--> \\1"


def test_places_are_logarithms_of_what_has_one() -> None:
    columns = [{"key": "x", "log": True}, {"key": "y", "log": False}]
    places = place_columns(columns, {"x": np.array([1e-6, 1e3]), "y": np.array([np.inf, -3.0])})
    np.testing.assert_allclose(places["x"], [-6.0, 3.0])
    np.testing.assert_array_equal(places["y"], [np.nan, -3.0])


def contrast(one: str, other: str) -> float:
    """Return the contrast of two colours as defined in the Web Content Accessibility Guidelines 2.1, 1.4.3."""

    def luminance(colour: str) -> float:
        parts = np.array([int(colour[i : i + 2], 16) for i in (1, 3, 5)]) / 255.0
        linear = np.where(parts <= 0.04045, parts / 12.92, ((parts + 0.055) / 1.055) ** 2.4)
        return float(linear @ [0.2126, 0.7152, 0.0722])

    high, low = sorted((luminance(one), luminance(other)), reverse=True)
    return (high + 0.05) / (low + 0.05)


def test_text_stands_out_in_both_themes(file: Path) -> None:
    assert contrast("#ffffff", "#000000") == pytest.approx(21.0)
    themes = re.findall(r":root(?:\[data-theme=\"dark\"\])? \{(.*?)\}", file.read_text(encoding="utf-8"), re.DOTALL)
    assert len(themes) == 2
    for theme in themes:
        colours = dict(re.findall(r"--(\w+): (#\w{6})", theme))
        pairs = [(text, ground) for text in ("ink", "soft", "accent", "good", "bad") for ground in ("paper", "ground")]
        for text, ground in [*pairs, ("ink", "mark"), ("on", "a"), ("on", "b")]:
            assert contrast(colours[text], colours[ground]) >= 4.5, (text, ground)


def test_the_page_is_renewed_when_the_run_is(cli: Cli, run_copy: Path) -> None:
    assert cli("page", "run").exit_code == 0
    before = record((run_copy / "page.html").read_text(encoding="utf-8"))
    assert cli("resume", "run", "--generations", "5", "--quiet", "--no-figures").exit_code == 0
    run, carried = load_run(run_copy), record((run_copy / "page.html").read_text(encoding="utf-8"))
    np.testing.assert_allclose(carried["values"]["gain"], run.front["gain [dB]"], rtol=1e-8)
    assert carried["values"]["gain"] != before["values"]["gain"]
    assert carried["deck_command"] == "optisize deck run --design"
    assert not [p for p in Path.cwd().iterdir() if p.name.startswith(".")]


def test_simulated_columns_renew_the_page(cli: Cli, run_copy: Path) -> None:
    assert cli("page", "run").exit_code == 0
    run = load_run(Path("run"))
    run.front["simulated gain [dB]"] = run.front["gain [dB]"] + 0.5
    save_resimulated(run, None, Path("run"), False)
    carried = record((run_copy / "page.html").read_text(encoding="utf-8"))["values"]
    np.testing.assert_allclose(np.subtract(carried["simulated gain"], carried["gain"]), 0.5, rtol=1e-6)


def test_a_run_without_a_page_gets_none(cli: Cli, run_copy: Path) -> None:
    assert cli("resume", "run", "--generations", "3", "--quiet", "--no-figures").exit_code == 0
    assert not (run_copy / "page.html").exists()


def test_simulated_figures_are_columns_of_their_own(sample: Run) -> None:
    front = sample.front.iloc[:3].copy()
    front["simulated gain [dB]"] = [20.5, np.nan, 20.0]
    carried = page_record(replace(sample, front=front))
    assert carried["values"]["simulated gain"] == [20.5, None, 20.0]
    assert [c["kind"] for c in carried["columns"] if c["key"] == "simulated gain"] == ["simulated"]


@pytest.mark.parametrize("count", [1, 2, 3, 4, 6])
def test_goals_are_shown_in_pairs(count: int) -> None:
    goals = [f"g{i}" for i in range(count)]
    columns = [*({"key": g, "kind": "goal"} for g in goals), {"key": "w", "kind": "free"}]
    views = view_axes(columns, goals)
    pairs = {frozenset(axes) for name, axes in views.items() if name.startswith("goals-")}
    assert len(pairs) == min(count * (count - 1) // 2, 6)
    assert all(len(pair) == 2 and pair <= set(goals) for pair in pairs)
    assert views["size-0"] == ("w", "g0")
    assert set(views["any"]) <= set(goals)


def test_a_full_disk_leaves_the_page_that_was_there(
    sample: Run, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    run = replace(sample, front=sample.front.iloc[:1])
    (tmp_path / "page.html").write_text("old", encoding="utf-8")

    def full(*_: object) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr("os.replace", full)
    with pytest.raises(OptisizeError, match="No space left"):
        write_page(run, tmp_path / "page.html")
    assert [p.read_text(encoding="utf-8") for p in tmp_path.iterdir()] == ["old"]


def test_the_command_says_what_it_wrote_and_refuses_what_it_cannot(cli: Cli, run_copy: Path) -> None:
    result = cli("page", "run", "--to", "front.html")
    assert result.exit_code == 0
    assert result.stdout.startswith("front.html: ")
    assert result.stderr == ""
    refused(cli, "nowhere", "no such run", words=("page", "nowhere"))
    refused(cli, "--to", "directory", words=("page", "run", "--to", "run"))
    refused(cli, "--to", "front.pdf", ".html", words=("page", "run", "--to", "front.pdf"))
    assert cli("page", "run", "--to", "somewhere/page.html").exit_code == 0
    assert Path("somewhere/page.html").is_file()
    front = run_copy / "front.csv"
    front.write_text(front.read_text(encoding="utf-8").splitlines()[0] + "\n", encoding="utf-8")
    refused(cli, "front is empty", words=("page", "run"))
