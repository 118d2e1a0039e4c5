"""Benchmarks: ratios measured in one run, printed, never asserted."""
