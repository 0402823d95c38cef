"""Tests of polewise.grammar."""
