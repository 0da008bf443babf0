"""Benchmarks: every claim of speed or accuracy, as a ratio to a named baseline in the same run."""
