"""Benchmarks: the program beside what one would write without it; see `python -m tests.benchmarks`."""
