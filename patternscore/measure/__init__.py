"""Measures: located features in, readings out; pure functions of arrays."""
