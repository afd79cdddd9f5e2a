"""Calculated patterns of a phase or a formula, as tables and curves."""
