"""What the tests of the page share: the committed run, its page, and a browser that has it open."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from optisize.front.run import Run, load_run
from optisize.show.page import write_page
from tests.show.browsing import chromium, opened, settled
from tests.test_problems import ROOT


@pytest.fixture(scope="session")
def sample() -> Run:
    """The committed run of 200 designs."""
    return load_run(ROOT / "results" / "sample")


@pytest.fixture(scope="session")
def file(sample: Run, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Its page."""
    return write_page(sample, tmp_path_factory.mktemp("page") / "page.html")


@pytest.fixture(scope="module")
def browser() -> Iterator[Any]:
    with chromium() as found:
        yield found


@pytest.fixture(scope="module")
def shared(browser: Any, file: Path) -> Iterator[Any]:
    with opened(browser, file) as shown:
        yield shown


@pytest.fixture
def tab(shared: Any) -> Any:
    """The page of the sample, with everything as it was when it was opened."""
    shared.evaluate(
        """() => {
            for (const id of ["widen", "unbrush"]) document.getElementById(id).click();
            for (const [id, value] of [["pick-a", "93"], ["pick-b", ""], ["deck-of", "a"]]) {
                document.getElementById(id).value = value;
                document.getElementById(id).dispatchEvent(new Event("change"));
            }
            if (document.getElementById("only").checked) document.getElementById("only").click();
            document.querySelector("th[data-key=gain] button").click();
            document.querySelector("th[data-key=design] button").click();
            const top = document.body.insertBefore(document.createElement("span"), document.body.firstChild);
            top.tabIndex = -1;
            top.focus();
            top.remove();
            scrollTo({top: 0, behavior: "instant"});
        }"""
    )
    settled(shared)
    return shared
