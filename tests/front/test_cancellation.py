"""A front with both rejections side by side: where the systematic one is a balance that mismatch destroys.

A mirror subtracts what both halves of a pair do in common, so a matched stage rejects far more than a real one: the
handbook's 2 gm1 gm3 Rss (ro2 parallel ro4) against (gm / dgm)(1 + 2 gm Rss) (Gray, Hurst, Lewis and Meyer, Analysis and
Design of Analog Integrated Circuits, ch. 3 and 4, from memory).
"""

from __future__ import annotations

import numpy as np
import pytest

from optisize.front.explore import search
from optisize.front.run import Run
from optisize.front.spread import spread
from optisize.front.table import sizes_of, values_of
from optisize.problem.load import load_problem

PROBLEM = """
title   = "both rejections of a mirror-loaded pair"
process = "generic-180"
[stage]
input = "nmos"
load  = "mirror"
tail  = "cascode"
[conditions]
supply           = "1.8 V"
common_mode      = "1.1 V"
load_capacitance = "500 fF"
[sizes]
input.width              = ["2 um", "200 um"]
input.length             = ["0.18 um", "4 um"]
load.width               = ["1 um", "100 um"]
load.length              = ["0.18 um", "8 um"]
tail.width               = ["1 um", "40 um"]
tail.length              = ["0.18 um", "8 um"]
tail.units               = [1, 16]
tail.cascode.width       = ["1 um", "40 um"]
tail.cascode.length      = "0.18 um"
tail.cascode.bias.width  = ["0.3 um", "4 um"]
tail.cascode.bias.length = ["1 um", "8 um"]
bias.current             = ["100 nA", "20 uA"]
[goals]
cmrr          = "max"
cmrr_mismatch = "max"
power         = "min"
[limits]
headroom = { min = "30 mV" }
area     = { max = "3000 um^2" }
[search]
population  = 100
generations = 60
seed        = 2
"""


@pytest.fixture(scope="module")
def run(tmp_path_factory: pytest.TempPathFactory) -> Run:
    path = tmp_path_factory.mktemp("both") / "both.toml"
    path.write_text(PROBLEM, encoding="utf-8")
    return search(load_problem(path))


def test_mismatch_does_not_reward_the_balance(run: Run) -> None:
    """The best systematic rejection is tens of decibels above what mismatch leaves, and others keep more of theirs."""
    values = values_of(run.problem, run.front)
    cmrr, kept = values["cmrr"], values["cmrr_mismatch"]
    assert (kept <= cmrr).all()
    best = int(np.argmax(cmrr))
    assert cmrr[best] - kept[best] > 30.0
    assert kept.max() > kept[best] + 3.0
    assert cmrr[np.argmax(kept)] < cmrr[best] - 3.0


def test_samples_show_what_is_kept(run: Run) -> None:
    """In a Monte Carlo of that design nearly no sample comes near the systematic figure; most keep what was said."""
    values, sizes = values_of(run.problem, run.front), sizes_of(run.problem, run.front)
    best = int(np.argmax(values["cmrr"]))
    one = {name: value[best : best + 1] for name, value in sizes.items()}
    found = spread(run.problem, one, samples=2000, seed=3)
    sampled = next(d.values for d in found.distributions if d.measure.name == "cmrr_mismatch")
    assert np.mean(sampled > values["cmrr"][best] - 10.0) < 0.05
    assert 0.99 < np.mean(sampled >= values["cmrr_mismatch"][best]) < 1.0
