"""What the benchmarks need from the outside world: the circuit simulator."""

from tests.reference.conftest import ngspice

__all__ = ["ngspice"]
