"""Which designs of a batch are still being solved: those that are done drop out, so that the rest costs less."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from optisize.process.law import Pick

WORTHWHILE = 3  # the batch is thinned once one design in so many is done: thinning itself costs as much as a step


class Active:
    """The designs of a batch that are still being solved, by their positions in what is left of it.

    Each design is read at its own last step, so that it does not depend on those beside it.
    """

    def __init__(self, designs: int) -> None:
        """Begin with all of them."""
        self._designs: NDArray[np.intp] = np.arange(designs)
        self._over = np.zeros(designs, dtype=bool)

    def fresh(self, settled: NDArray[np.bool_]) -> NDArray[np.intp]:
        """Return the positions of those that have settled now; they are over."""
        positions = np.flatnonzero(settled & ~self._over)
        self._over[positions] = True
        return positions

    def give_up(self, hopeless: NDArray[np.bool_]) -> None:
        """Let those be over, too."""
        self._over |= hopeless

    def designs(self, positions: Pick) -> NDArray[np.intp]:
        """Return which designs of the whole batch stand at positions."""
        return self._designs[positions]

    def thinned(self) -> NDArray[np.intp] | None:
        """Return the positions to go on with, and forget the others; None while that is not worth it."""
        if WORTHWHILE * np.count_nonzero(self._over) <= len(self._over):
            return None
        return self.rest()

    def rest(self) -> NDArray[np.intp]:
        """Return the positions of those that are not over, and forget the others."""
        left = np.flatnonzero(~self._over)
        self._designs, self._over = self._designs[left], self._over[left]
        return left
