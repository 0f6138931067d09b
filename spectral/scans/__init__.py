"""Scans and maps as data, and the files they come from and go to."""
