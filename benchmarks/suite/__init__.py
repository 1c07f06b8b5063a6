"""The asv suite of ssn; `benchmarks/run.py` runs it."""
