"""Counts and a calibration in, areal densities with errors out."""
