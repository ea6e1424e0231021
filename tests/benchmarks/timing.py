"""Processor time of some work in this process."""

from __future__ import annotations

import time
from collections.abc import Callable


def spent(work: Callable[[], object]) -> float:
    """Return the processor seconds of some work."""
    begin = time.process_time()
    work()
    return time.process_time() - begin


def least(work: Callable[[], object], repeats: int) -> float:
    """Return the least processor seconds of some work."""
    return min(spent(work) for _ in range(repeats))
