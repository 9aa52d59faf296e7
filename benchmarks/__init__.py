"""Measurements of the library, each figure beside its goal: ``python -m benchmarks``."""
