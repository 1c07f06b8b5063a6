"""Benchmarks of the taut string."""
