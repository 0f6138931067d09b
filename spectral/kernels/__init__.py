"""Compiled loops; the only package that imports numba. Each has a NumPy twin."""
