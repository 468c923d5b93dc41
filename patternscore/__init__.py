"""Scores grabbed frames of a test pattern."""
