"""Figures, tables and one HTML page."""
