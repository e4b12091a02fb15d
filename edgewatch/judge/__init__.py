"""Figures and bands -> verdicts."""
