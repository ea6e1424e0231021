"""The page of a run: one HTML file that needs nothing else, to explore a front offline.

Everything that a problem or a run says reaches the page as JSON in which no letter can end or open a tag, or as
escaped text; its script puts it there as text only.
"""

from __future__ import annotations

import html
import json
import re
from collections.abc import Mapping
from dataclasses import replace
from importlib import resources
from pathlib import Path
from typing import Any

from optisize.errors import printable
from optisize.files import write_text
from optisize.front.run import PAGE, Run
from optisize.show.page_record import page_record
from optisize.show.page_views import document_json

STYLES = ("page.css", "parts.css")
SCRIPTS = ("engineering.js", "record.js", "views.js", "narrow.js", "table.js", "card.js", "deck.js", "start.js")
_SLOT = re.compile(r"<!--(\w+)-->")
_UNSAFE = {ord(c): f"\\u{ord(c):04x}" for c in "<>&\u2028\u2029"}


def write_page(run: Run, path: Path) -> Path:
    """Write the page of a run, whole or not at all; return its path.

    Raises:
        InputError: the front is empty, or one of its designs has no operating point.
        OptisizeError: it cannot be written.
    """
    write_text(path, page(run))
    return path


def renew_page(run: Run, target: Path, directory: Path) -> None:
    """Write the page of a run that is to take the place of another one, if that one has a page.

    Args:
        run: the new run.
        target: the directory whose place it takes.
        directory: where the new run is before it gets that name.
    """
    if (target / PAGE).is_file() and len(run.front):
        write_page(replace(run, path=target), directory / PAGE)


def page(run: Run) -> str:
    """Return the page of a run.

    Raises InputError when the front is empty, or one of its designs has no operating point.
    """
    record = page_record(run)
    values = {c["key"]: run.front[c["heading"]].to_numpy(dtype=float) for c in record["columns"]}
    plots = document_json(record["columns"], values, record["goals"])
    parts = {
        "title": html.escape(printable(run.problem.title)),
        "style": "\n".join(_asset(name) for name in STYLES),
        "bokeh": library(),
        "record": embedded(record),
        "plots": embedded(plots),
        "script": "\n".join(_asset(name) for name in SCRIPTS),
    }
    return filled(_asset("page.html"), parts)


def library() -> str:
    """Return the plotting library as tags with the whole of its text: what plots need, and no widgets."""
    from bokeh.resources import Resources

    return str(Resources(mode="inline", components=["bokeh"], minified=True, log_level="error").render_js())


def filled(template: str, parts: Mapping[str, str]) -> str:
    """Return a template with each slot ``<!--name-->`` filled once; what is put in is not looked at again."""
    return _SLOT.sub(lambda match: parts[match.group(1)], template)


def embedded(data: Any) -> str:
    """Return JSON that can stand between the tags of a script: nothing in it ends, opens or escapes one."""
    return json.dumps(data, ensure_ascii=False, allow_nan=False, separators=(",", ":")).translate(_UNSAFE)


def _asset(name: str) -> str:
    return (resources.files("optisize.show") / "web" / name).read_text(encoding="utf-8")
