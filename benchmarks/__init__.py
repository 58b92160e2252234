"""Measurements of speed, memory, exactness and coverage; see `python -m benchmarks --help`."""
