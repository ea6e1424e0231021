"""The command line: the commands of its rooms; heavy modules are imported by the command that needs them."""

from __future__ import annotations

from optisize.commands.common import app

# The order of the help: first the main job.
# isort: off
from optisize.commands import search, choose, designs, page, figures, compare, mismatch, sheet, simulate
from optisize.commands import reference, characterise
# isort: on

__all__ = [
    "app",
    "characterise",
    "choose",
    "compare",
    "designs",
    "figures",
    "main",
    "mismatch",
    "page",
    "reference",
    "search",
    "sheet",
    "simulate",
]


def main() -> None:
    """Run the command line."""
    app()


if __name__ == "__main__":
    main()
