"""Mismatch to first order against differences of the nonlinear stage, and against handbook formulas."""

from __future__ import annotations

import numpy as np
import pytest

from optisize.process.law import Array
from optisize.stage import mismatch
from optisize.stage.analysis import Analysis
from optisize.stage.mismatch import Deviations, Sampled, varied
from tests.stage.stages import KINDS, analysed

STEP = Deviations(1e-5, 1e-4, 1e-4)  # V, relative, relative: small enough to be straight, large beside rounding


def one_by_one(a: Analysis, sign: float) -> Deviations:
    """Return deviations, one parameter of one element a column, threshold first."""
    t, r = len(a.wiring.transistors), len(a.wiring.resistors)
    columns = np.eye(2 * t + r) * sign
    return Deviations(
        columns[:t] * STEP.threshold, columns[t : 2 * t] * STEP.factor, columns[2 * t :] * STEP.resistance
    )


def sampled(a: Analysis, deviations: Deviations) -> Sampled:
    count = deviations.threshold.shape[1]
    return Sampled(varied(a.circuit.take(np.zeros(count, dtype=np.intp)), deviations), a)


def differences(a: Analysis) -> tuple[Array, Array]:
    """Return what each deviation does to the input that restores the output and to the common-mode gain, per unit."""
    high, low = (sampled(a, one_by_one(a, sign)) for sign in (1.0, -1.0))
    assert high.converged.all()
    assert low.converged.all()
    t, r = len(a.wiring.transistors), len(a.wiring.resistors)
    step = np.repeat(STEP, (t, t, r))
    common = [x.wiring.output(x.responses[:, 1]) for x in (high, low)]
    return (high.offset - low.offset) / (2.0 * step), (common[0] - common[1]) / (2.0 * step)


@pytest.mark.parametrize("process", ["handbook", "generic-180"])
@pytest.mark.parametrize("kind", KINDS, ids="-".join)
def test_first_order_effects_are_the_derivatives(kind: tuple[str, ...], process: str) -> None:
    """Of every parameter of every element by itself, each sample with its own operating point and offset."""
    a = analysed(kind, process)
    offset, common = differences(a)
    found = mismatch.effects(a)
    by_output = np.concatenate([x[:, 0] for x in found.output])
    scale = np.abs(offset).max()
    np.testing.assert_allclose(-by_output / a.adm[0], offset, rtol=1e-4, atol=1e-6 * scale)
    by_common = np.concatenate([x[:, 0] for x in found.common])
    np.testing.assert_allclose(by_common, common, rtol=2e-3, atol=2e-4 * np.abs(common).max() + 1e-12)
