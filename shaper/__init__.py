"""Waveforms for a bench that can only drive x and y."""

__version__ = "0.1.0"
