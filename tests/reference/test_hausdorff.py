"""Hausdorff distances against published examples and against other libraries."""

import numpy as np
import pytest
import shapely

from geometry.deviation import directed_hausdorff, hausdorff
from geometry.polyline import Polyline


def polyline(text: str) -> Polyline:
    return Polyline(np.array([pair.split() for pair in text.split(",")], dtype=np.float64))


def test_example_of_the_geos_documentation() -> None:
    # GEOS, documentation of class DiscreteHausdorffDistance: for these two lines the distance between vertices is
    # 22.360, the true one about 47.8. 910/19 follows from its geometry: on the edge (100, 0)-(10, 100) the point
    # equally far from (0, 10)-(80, 10) and from the edge x = 0. Backward: computed by the same reasoning.
    a, b = polyline("0 0, 100 0, 10 100, 10 100"), polyline("0 100, 0 10, 80 10")
    found = hausdorff(a, b, 1e-10)
    assert found.forward.measured <= 910.0 / 19.0 <= found.forward.certified
    assert found.forward.certified - found.forward.measured <= 1e-10
    assert found.backward.certified == pytest.approx(44.5362404707, abs=1e-10)


def test_directions_and_places_of_a_pair_with_inner_maxima() -> None:
    # computed with exact equidistance conditions; neither maximum lies at a vertex
    a = polyline("26 8, 13 -2, 13 19, 10 19, 10 23, 1 17")
    b = polyline("15 1, 28 11, 13 26, 1 18")
    found = hausdorff(a, b, 1e-10)
    assert found.forward.certified == pytest.approx(9.9177842200, abs=1e-9)
    assert found.backward.certified == pytest.approx(9.3666923472, abs=1e-9)
    assert found.forward.place is not None
    assert found.backward.place is not None
    np.testing.assert_allclose(found.forward.place.point, [13.0, 11.97413505], atol=1e-7)
    np.testing.assert_allclose(found.backward.place.point, [22.36669235, 16.63330765], atol=1e-7)


def test_example_of_the_shapely_documentation() -> None:
    # Shapely manual, hausdorff_distance: LINESTRING (130 0, 0 0, 0 150) and (10 10, 10 150, 130 10) give 14.14 by
    # vertices alone, and 70 with densify = 0.5; the whole distance is 970/13, on the second line's last edge
    a, b = polyline("130 0, 0 0, 0 150"), polyline("10 10, 10 150, 130 10")
    shapes = shapely.linestrings(a.points), shapely.linestrings(b.points)
    found = hausdorff(a, b, 1e-10)
    assert found.measured <= 970.0 / 13.0 <= found.certified
    assert shapely.hausdorff_distance(*shapes) == pytest.approx(np.sqrt(200.0))
    assert shapely.hausdorff_distance(*shapes, densify=0.001) == pytest.approx(found.certified, abs=0.1)


@pytest.mark.parametrize("seed", range(10))
def test_densified_distances_of_shapely_stay_below_and_come_near(seed: int) -> None:
    # GEOS header: "for all geometries a, b: DHD(a, b) <= HD(a, b)"
    rng = np.random.default_rng(seed)
    a, b = (Polyline(rng.uniform(0.0, 10.0, (int(rng.integers(2, 15)), 2))) for _ in range(2))
    found = hausdorff(a, b, 1e-9)
    share = 0.002
    longest = max(float(a.edge_lengths().max()), float(b.edge_lengths().max()))
    below = shapely.hausdorff_distance(shapely.linestrings(a.points), shapely.linestrings(b.points), densify=share)
    assert below <= found.certified <= below + share * longest + 1e-9


def test_regular_polygons_with_a_common_centre() -> None:
    # farthest from the outer 360-gon, circumradius 8, is the middle of an edge of the inner 12-gon, circumradius 5: at
    # 15 degrees, 5 cos(15 deg) from the centre, where the outer one has a vertex; the nearest edges are the two that
    # meet there, whose normals are half a degree off: (8 - 5 cos(15 deg)) cos(0.5 deg). Worked out here.
    def ring(count: int, radius: float) -> Polyline:
        angle = 2.0 * np.pi * np.arange(count) / count
        return Polyline(radius * np.stack([np.cos(angle), np.sin(angle)], axis=1), True)

    found = directed_hausdorff(ring(12, 5.0), ring(360, 8.0), 1e-9)
    half = np.radians(0.5)
    middle = (8.0 - 5.0 * np.cos(np.radians(15.0))) * np.cos(half)
    assert found.measured <= middle <= found.certified
