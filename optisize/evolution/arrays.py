"""The kinds of arrays that the search handles; the last axis of each is the designs."""

from __future__ import annotations

from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

Floats: TypeAlias = NDArray[np.float64]
Indices: TypeAlias = NDArray[np.intp]
Mask: TypeAlias = NDArray[np.bool_]
