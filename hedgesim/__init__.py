"""Discrete-time delta-hedging backtester for option books."""

__version__ = "0.1.0"
