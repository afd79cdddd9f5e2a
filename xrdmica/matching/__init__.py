"""Calculated scans matched to measured ones: what identification and estimation share."""
