"""Benchmarks are run by hand (`python tests/bench/run.py`); pytest collects nothing here."""

collect_ignore_glob = ["*.py"]
