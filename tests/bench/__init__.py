"""Benchmarks, made on request and never part of the tests: ``python -m tests.bench`` rewrites
docs/performance.md."""
