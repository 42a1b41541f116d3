"""Stations: sparse points that a curve is laid through. Their order, their judgement, and the curve itself."""

from geometry.stations.judge import Suspect, judge_stations
from geometry.stations.order import nearest_order
from geometry.stations.overshoots import Cure, Overshoot, overshoots
from geometry.stations.sparse import Sparse, sparse_spans
from geometry.stations.within import spring_within

__all__ = [
    "Cure",
    "Overshoot",
    "Sparse",
    "Suspect",
    "judge_stations",
    "nearest_order",
    "overshoots",
    "sparse_spans",
    "spring_within",
]
