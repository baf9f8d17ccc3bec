"""Speed, measured beside its references in one run: ``python -m tests.benchmarks``."""
