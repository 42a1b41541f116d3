import numpy as np
import pytest

from geometry.polyline import Polyline
from geometry.simple import is_simple


@pytest.mark.parametrize(
    ("points", "closed", "simple"),
    [
        ([(0, 0), (10, 0), (10, 10), (0, 10)], True, True),
        ([(0, 0), (10, 10), (10, 0), (0, 10)], True, False),
        ([(0, 0), (10, 10), (10, 0), (0, 10)], False, False),
        ([(0, 0), (10, 0), (10, 10), (4, 0), (0, 10)], False, False),  # touches itself
        ([(0, 0), (10, 0), (10, 10), (4, 0.1), (0, 10)], False, True),
    ],
)
def test_crossing_and_touching_are_seen(points, closed, simple):
    assert is_simple(Polyline(np.array(points, dtype=float), closed)) is simple
