"""Kept quantities, records on disk, verdicts and figures."""
