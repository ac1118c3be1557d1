"""narrowgauge measures, level by level, where a Monte Carlo path kernel may run in low precision."""

__version__ = "0.1.0"
