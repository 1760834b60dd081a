"""Recordings with known truth, for the sample, the tests and the benchmarks."""
