"""Stations: sparse points that a curve is laid through. Their order, their judgement, and the curve itself."""
