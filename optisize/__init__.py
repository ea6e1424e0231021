"""Fronts of finished sizings for the input stage of an amplifier, comparator or sensor front end.

    problem = optisize.load("problems/thermopile-preamplifier.toml")
    run = optisize.search(problem)
    run.front            # a pandas DataFrame, one row a design
    run.save("results/mine")

Everything is imported when it is first used, so that the command line starts at once.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from optisize.front.explore import search as search
    from optisize.front.run import load_run as load_run
    from optisize.problem.load import load_problem as load
    from optisize.process.card import load_process as load_process

__version__ = "0.1.0"
__all__ = ["__version__", "load", "load_process", "load_run", "search"]

_PLACES = {
    "load": ("optisize.problem.load", "load_problem"),
    "load_process": ("optisize.process.card", "load_process"),
    "load_run": ("optisize.front.run", "load_run"),
    "search": ("optisize.front.explore", "search"),
}


def __getattr__(name: str) -> Any:
    """Import a public function when it is first used."""
    if name not in _PLACES:
        raise AttributeError(f"module 'optisize' has no attribute {name!r}")
    module, attribute = _PLACES[name]
    return getattr(import_module(module), attribute)
