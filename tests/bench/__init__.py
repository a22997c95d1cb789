"""Benchmarks: run by hand, never as timed tests. Each prints ratios measured side by side in one run."""
