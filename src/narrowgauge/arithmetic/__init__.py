"""Formats, rounding and elementary operations on bare carrier arrays."""
