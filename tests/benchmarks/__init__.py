"""Speed and memory as ratios within one run: ``python -m tests.benchmarks``."""
