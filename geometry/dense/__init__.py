"""Dense points on a curve: few vertices that keep a chord error, a longest step and a largest turn."""

from geometry.dense.points import Dense
from geometry.dense.search import dense_points

__all__ = ["Dense", "dense_points"]
