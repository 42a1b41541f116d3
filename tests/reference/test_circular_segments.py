"""Arc chains against the table of circular segments for radius 1, as handbooks print it to five figures.

The values follow from chord 2 sin(a / 2), height 1 - cos(a / 2), area (a - sin a) / 2 for the central angle a.
"""

import numpy as np
import pytest

from geometry.arcs import ArcChain, arc_part_counts

# central angle in degrees, chord, height, area
TABLE = [
    (10.0, 0.17431, 0.00381, 0.00044),
    (60.0, 1.00000, 0.13397, 0.09059),
    (90.0, 1.41421, 0.29289, 0.28540),
    (120.0, 1.73205, 0.50000, 0.61418),
]


@pytest.mark.parametrize("side", [1.0, -1.0])
@pytest.mark.parametrize(("angle", "chord", "height", "area"), TABLE)
def test_segments(angle, chord, height, area, side):
    a = np.radians(angle)
    exact = 2.0 * np.sin(0.5 * a)
    assert exact == pytest.approx(chord, abs=5e-6)
    # out along the arc and straight back: the closed chain encloses the segment
    segment = ArcChain(np.array([[0.0, 0.0], [exact, 0.0]]), np.array([side * np.tan(0.25 * a), 0.0]), True)
    centre, radius = segment.circles()
    assert radius[0] == pytest.approx(1.0, rel=1e-12)
    assert segment.area() == pytest.approx(side * area, abs=5e-6)
    low, high = segment.bounds()
    assert high[1] - low[1] == pytest.approx(height, abs=5e-6)
    assert centre[0, 1] == pytest.approx(side * (1.0 - height), abs=5e-6)
    assert segment.length() == pytest.approx(a + exact, rel=1e-12)
    assert segment.sweeps()[0] == pytest.approx(side * a, rel=1e-12)


@pytest.mark.parametrize(("angle", "chord", "height", "area"), TABLE)
def test_sagitta_decides_the_number_of_chords(angle, chord, height, area):
    """One chord serves where its sagitta, the height of the segment, is allowed; a little less allowed takes two."""
    exact, bulge = 2.0 * np.sin(np.radians(0.5 * angle)), np.tan(np.radians(0.25 * angle))
    sagitta = 1.0 - np.cos(np.radians(0.5 * angle))
    assert sagitta == pytest.approx(height, abs=5e-6)
    counts = [
        int(arc_part_counts(np.array([exact]), np.array([bulge]), d)[0]) for d in (1.001 * sagitta, 0.999 * sagitta)
    ]
    assert counts == ([1, 2] if angle <= 90.0 else [2, 2])  # no chord spans more than a quarter turn
    assert area < chord * height  # the segment lies in its box


def test_chords_of_a_circle_by_the_sagitta_formula():
    """r - sqrt(r^2 - c^2 / 4): for r = 100 a chord of 12 has a sagitta of 0.180162 (100 - sqrt 9964)."""
    arc = ArcChain(np.array([[-6.0, 0.0], [6.0, 0.0]]), np.array([np.tan(0.5 * np.arcsin(0.06))]))
    low, _ = arc.bounds()
    assert -low[1] == pytest.approx(100.0 - np.sqrt(9964.0), rel=1e-10)
