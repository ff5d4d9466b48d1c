"""Benchmarks: repeatable measurements, each against a named yardstick in the same run."""
