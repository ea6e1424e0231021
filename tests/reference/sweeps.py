"""Sweeps of a population in the circuit simulator in which every stage goes its own way, and what is read from them."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path

import numpy as np

from optisize.process.law import Array
from optisize.stage.analysis import Analysis
from tests.reference import spice
from tests.reference.bench import Bench, Sources, parameter

DIGITS = 3  # of the nodesets [V]; with one the first point of a stage with cascodes takes a hundred times as long
COARSE = np.array([0.0, 0.15, 0.3, 0.45, 0.6, 0.75, 0.88])  # of the way to an end that is expected
STAGES_OF = dict[str, Array]


def stretches(parts: Mapping[str, Array]) -> tuple[Array, dict[str, Sequence[str]]]:
    """Join stretches of ways, each (N, points), to one; return it and the sweep of each stretch by name."""
    analyses: dict[str, Sequence[str]] = {}
    begin = 0
    for name, part in parts.items():
        end = begin + part.shape[1] - 1
        analyses[name] = [f"dc v_theta {begin} {end} 1"]
        begin = end + 1
    return np.concatenate(list(parts.values()), axis=1), analyses
