"""What a stage answers to at one frequency: one adjoint solve gives every gain to the output and every noise weight."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from optisize.process.law import Array
from optisize.stage.analysis import Analysis
from optisize.stage.linear import solve

DRIVES: dict[str, dict[str, float]] = {
    "differential": {"positive": 0.5, "negative": -0.5},
    "common": {"positive": 1.0, "negative": 1.0},
    "supply": {"supply": 1.0},
    "ground": {"ground": 1.0},
}


@dataclass(frozen=True)
class Response:
    """The small-signal answers of N designs at a frequency; real arrays at DC, complex ones elsewhere.

    Attributes:
        a: the analysis.
        frequency: in hertz.
    """

    a: Analysis
    frequency: float

    @property
    def _jw(self) -> complex:
        return 2j * np.pi * self.frequency

    @cached_property
    def _matrix(self) -> NDArray[Any]:
        if self.frequency == 0.0:
            return self.a.matrix
        return self.a.matrix + self._jw * self.a.capacitance_matrix

    @cached_property
    def adjoint(self) -> NDArray[Any]:
        """What a current into each unknown node does to the output, and to the mean of its sides, (U, 1 or 2, N)."""
        w = self.a.wiring
        wanted = np.stack([w.output_weights, w.mean_weights], axis=1)[:, : len(self.a.topology.output)]
        right = np.broadcast_to(wanted[:, :, None], (*wanted.shape, self.a.circuit.designs))
        return adjoint_solve(self.a, self._matrix, right.astype(self._matrix.dtype))

    def _pull(self, drive: str) -> NDArray[Any]:
        """Return how the residual moves with a drive, (U, N)."""
        a, vector = self.a, self.a.wiring.drive(**DRIVES[drive])
        pull: NDArray[Any] = np.tensordot(a.wiring.conductance_stamp, vector, (1, 0)) @ a.slopes
        if a.leak is not None:
            pull = pull + np.tensordot(a.wiring.leak_stamp, vector, (1, 0)) @ a.leak
        if self.frequency:
            stamp = np.tensordot(a.wiring.capacitance_stamp, vector, (1, 0))
            pull = pull + self._jw * (stamp @ a.capacitance_branches)
        return pull

    def gain(self, drive: str) -> NDArray[Any]:
        """Return the gain from a drive to the output, (N,); drives are those of `DRIVES`."""
        return -(self.adjoint[:, 0] * self._pull(drive)).sum(axis=0)

    def mean_gain(self, drive: str) -> NDArray[Any]:
        """Return the gain to the output, or to the mean of the two sides of a differential one, (N,)."""
        if self.a.topology.mean_is_held:
            return np.zeros(self.a.circuit.designs)
        return -(self.adjoint[:, -1] * self._pull(drive)).sum(axis=0)

    @cached_property
    def differential(self) -> NDArray[Any]:
        """The differential gain, (N,)."""
        return self.gain("differential")

    @cached_property
    def branches(self) -> NDArray[Any]:
        """What a current through each branch from its first to its second end takes from the output, (T + L + S, N)."""
        return self.a.wiring.current_stamp[: self.a.wiring.unknowns].T @ self.adjoint[:, 0]

    @cached_property
    def driven_differentially(self) -> NDArray[Any]:
        """The voltages of all nodes under the differential drive of one volt, (A, N)."""
        a = self.a
        voltages = np.zeros((len(a.wiring.nodes), a.circuit.designs), dtype=self._matrix.dtype)
        voltages += a.wiring.drive(**DRIVES["differential"])[:, None]
        pull = self._pull("differential")[:, None]
        voltages[: a.wiring.unknowns] = solve(self._matrix, -pull, a.wiring.pattern)[:, 0]
        return voltages

    @cached_property
    def input_capacitance(self) -> Array:
        """The capacitance at each input under the differential drive [F], (2, N)."""
        a = self.a
        inputs = [a.wiring.index["in+"], a.wiring.index["in-"]]
        stamp = a.wiring.all_capacitances[inputs]
        held = (stamp.reshape(-1, stamp.shape[-1]) @ a.capacitance_branches).reshape(2, stamp.shape[1], -1)
        charge = (held * self.driven_differentially).sum(axis=1)
        return np.asarray(charge.real) / np.array([[0.5], [-0.5]])


def response(a: Analysis, frequency: float) -> Response:
    """Return the answers at a frequency [Hz], worked out once for an analysis."""
    return a.once(("response", frequency), lambda: Response(a, frequency))


def adjoint_solve(a: Analysis, matrix: NDArray[Any], right: NDArray[Any]) -> NDArray[Any]:
    """Solve the transposed equations of N designs for right hand sides (U, K, N)."""
    pattern = a.wiring.pattern if np.iscomplexobj(matrix) else a.wiring.conductance_pattern
    turned = tuple(zip(*pattern, strict=True))
    return solve(matrix.transpose(1, 0, 2), right, turned)
