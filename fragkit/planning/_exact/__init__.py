"""Exact coefficients of least variance at fixed rotations."""
