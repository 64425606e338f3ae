"""Benchmarks: the program beside what one would write without it; run `python -m tests.benchmarks`."""
