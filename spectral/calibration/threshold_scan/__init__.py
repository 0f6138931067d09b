"""Threshold settings turned into keV, pixel by pixel, from scans of known energies."""
