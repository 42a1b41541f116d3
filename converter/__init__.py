"""Drawings in, jobs, drawings out."""

__version__ = "0.1.0"
