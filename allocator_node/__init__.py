"""Decide live which robot of a mixed team does which task, and drive it there."""

__version__ = "0.1.0"
