"""Benchmarks of streambasis: ``python -m bench [QUESTION ...]``."""
