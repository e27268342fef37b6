"""Bulk stability audit of gain-scheduled state-space models."""

__version__ = "0.1.0"
