"""Evaluation, derivatives and Bezier pieces of B-splines against geomdl and scipy; the cubic circle of four pieces."""

import numpy as np
import pytest
from geomdl import BSpline as GeomdlBSpline
from geomdl import operations
from scipy.interpolate import BSpline

from geometry.bspline import Spline

CASES = [(degree, d, corner) for degree in (1, 2, 3) for d in (2, 3) for corner in (False, True)]


def random_spline(degree, d, corner):
    rng = np.random.default_rng(10 * degree + d)
    inner = np.cumsum(rng.uniform(0.2, 1.5, 9))
    inside = np.sort(np.concatenate([inner[:-1], [inner[4]] * (degree - 1)])) if corner else inner[:-1]
    knots = np.concatenate([[0.0] * (degree + 1), inside, [inner[-1]] * (degree + 1)])
    return Spline(knots, rng.normal(size=(len(knots) - degree - 1, d)) * 5.0, degree)


def in_geomdl(spline):
    other = GeomdlBSpline.Curve(normalize_kv=False)
    other.degree = spline.degree
    other.ctrlpts = spline.control.tolist()
    other.knotvector = spline.knots.tolist()
    return other


@pytest.mark.parametrize(("degree", "d", "corner"), CASES)
def test_points_and_derivatives_agree_with_scipy(degree, d, corner):
    ours = random_spline(degree, d, corner)
    other = BSpline(ours.knots, ours.control, degree)
    u = np.linspace(ours.knots[0], ours.knots[-1], 1_001)
    for order in range(degree + 1):
        wanted = other(u, nu=order)
        np.testing.assert_allclose(ours.evaluate(u, order), wanted, rtol=0.0, atol=1e-12 * np.abs(wanted).max())


@pytest.mark.parametrize(("degree", "d", "corner"), CASES)
def test_points_and_derivatives_agree_with_geomdl(degree, d, corner):
    ours = random_spline(degree, d, corner)
    other = in_geomdl(ours)
    for u in np.linspace(ours.knots[0], ours.knots[-1], 24)[:-1].tolist():
        wanted = other.derivatives(u, order=degree)
        for order in range(degree + 1):
            found = ours.evaluate(np.array([u]), order)[0]
            np.testing.assert_allclose(found, wanted[order], rtol=1e-9, atol=1e-9)


@pytest.mark.parametrize(("degree", "d"), [(2, 2), (2, 3), (3, 2), (3, 3)])
def test_bezier_pieces_agree_with_geomdl(degree, d):
    ours = random_spline(degree, d, False)
    pieces = operations.decompose_curve(in_geomdl(ours))
    assert len(pieces) == len(ours.beziers)
    for found, wanted in zip(ours.beziers, pieces, strict=True):
        np.testing.assert_allclose(found, wanted.ctrlpts, rtol=0.0, atol=1e-10)


def test_a_circle_of_four_cubic_pieces():
    """M. Goldapp, "Approximation of circular arcs by cubic polynomials", CAGD 8 (1991): arm 4/3 (sqrt 2 - 1).

    The radius is never under 1, and 2.7253e-4 over it at most.
    """
    arm = 4.0 / 3.0 * (np.sqrt(2.0) - 1.0)
    quarter = np.array([[1.0, 0.0], [1.0, arm], [arm, 1.0]])
    turn = np.array([[0.0, 1.0], [-1.0, 0.0]])
    control = np.vstack([quarter @ np.linalg.matrix_power(turn, k) for k in range(4)] + [quarter[:1]])
    knots = np.concatenate([[0.0], np.repeat(np.arange(5.0), 3), [4.0]])
    circle = Spline(knots, control, 3, True, True)
    radius = np.linalg.norm(circle.evaluate(np.linspace(0.0, 4.0, 40_001)), axis=1)
    assert radius.min() >= 1.0 - 1e-12
    assert radius.max() - 1.0 == pytest.approx(2.7253e-4, abs=1e-8)
    np.testing.assert_allclose(circle.bounds(), [[-1.0, -1.0], [1.0, 1.0]], atol=1e-12)
