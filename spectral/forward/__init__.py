"""Areal densities and a pixel response in, expected counts out."""
