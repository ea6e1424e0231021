"""What a notebook shows of runs and choices: well-formed, complete, and every text escaped."""

from __future__ import annotations

import re
from dataclasses import replace
from html.parser import HTMLParser
from pathlib import Path

import pytest

from optisize.front.run import Run, load_run
from optisize.quantities import write

HOSTILE = ["<script>alert(1)</script>", "</td></table><img src=x onerror=alert(1)>", '" onmouseover="x', "\x1b[31m\nx"]


class _Tags(HTMLParser):
    """Collects tags and text, and holds that every tag is closed in its order."""

    def __init__(self) -> None:
        super().__init__()
        self.open: list[str] = []
        self.seen: set[str] = set()
        self.text = ""

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        assert not attrs
        self.open.append(tag)
        self.seen.add(tag)

    def handle_endtag(self, tag: str) -> None:
        assert self.open.pop() == tag

    def handle_data(self, data: str) -> None:
        self.text += f"{data} "


def _read(html: str) -> _Tags:
    tags = _Tags()
    tags.feed(html)
    tags.close()
    assert tags.open == []
    return tags


@pytest.fixture
def run(finished_run: Path) -> Run:
    return load_run(finished_run)


def test_a_run_shows_its_title_its_extremes_and_a_few_designs(run: Run) -> None:
    tags = _read(run._repr_html_())
    assert run.problem.title in tags.text
    assert f"{len(run.front)} designs on the front" in tags.text
    assert write(run.front["gain [dB]"].max(), "dB") in tags.text
    assert write(run.front["supply_current [A]"].min(), "A") in tags.text
    assert {"table", "th", "td"} <= tags.seen
    assert len(re.findall("<tr>", run._repr_html_())) == 1 + 3 + 1 + 8


def test_a_choice_shows_why_and_what_it_misses(run: Run) -> None:
    choice = run.choose(wishes={"gain": "90 dB"})
    tags = _read(choice._repr_html_())
    for text in (choice.label, choice.why, str(choice.missing[0]), *choice.steps):
        assert text in tags.text


@pytest.mark.parametrize("text", HOSTILE)
def test_a_hostile_title_or_path_is_text(run: Run, text: str) -> None:
    hostile = replace(run, problem=replace(run.problem, title=text), path=Path(text.replace("/", "|")))
    for html in (hostile._repr_html_(), hostile.choose()._repr_html_()):
        tags = _read(html)
        assert tags.seen <= {"div", "p", "strong", "span", "table", "thead", "tbody", "tr", "th", "td"}
        assert all(c.isprintable() for c in html)
    assert "".join(c if c.isprintable() else "?" for c in text) in _read(hostile._repr_html_()).text
