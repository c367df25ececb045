"""Measurements; run with ``python -m tests.benchmarks``. No test depends on a time."""
