"""Wedge scan in, per-pixel responses out."""
