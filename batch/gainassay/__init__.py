"""Gainassay: which op-amps keep which gain stages inside their required accuracy, and what decides it."""

__version__ = "0.1.0"
