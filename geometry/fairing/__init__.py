"""The fairest curve in a tolerance band about a jagged polyline. All modules but `fair` count in tolerances."""

from geometry.fairing.fair import Faired, fair_outline

__all__ = ["Faired", "fair_outline"]
