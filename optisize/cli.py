"""The command line: the commands of its rooms; heavy modules are imported by the command that needs them."""

from __future__ import annotations

from optisize.commands.common import app

# The order of the help: first the main job.
# isort: off
from optisize.commands import search, designs, choose, mismatch, sheet, simulate, reference, characterise
# isort: on

__all__ = ["app", "characterise", "choose", "designs", "main", "mismatch", "reference", "search", "sheet", "simulate"]


def main() -> None:
    """Run the command line."""
    app()


if __name__ == "__main__":
    main()
