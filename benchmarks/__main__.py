"""Every benchmark, one after the other: ``python -m benchmarks``, or ``make bench``."""

from benchmarks import service, trail
from benchmarks.report import report

report([trail.BENCHMARKS, service.BENCHMARKS])
