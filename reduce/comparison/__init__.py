"""Stage 3: small models held against the full one."""

from modesieve.reduce.comparison.compare import compare
from modesieve.reduce.comparison.records import Check, Comparison, Sweep, TimeResponse

__all__ = ["Check", "Comparison", "Sweep", "TimeResponse", "compare"]
