"""What the checks against the outside world need: the circuit simulator."""

from __future__ import annotations

import os
import shutil

import pytest


@pytest.fixture(scope="session")
def ngspice() -> str:
    """The path of the circuit simulator; a machine without it skips, but continuous integration has to have it."""
    path = shutil.which("ngspice")
    if path is None:
        reason = "the circuit simulator ngspice is not installed"
        if os.environ.get("CI") == "true":
            pytest.fail(reason)
        pytest.skip(reason)
    return path
