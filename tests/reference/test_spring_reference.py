"""Curves sprung through stations against published sections, circles and an optimiser of another library."""

import numpy as np
import pytest
from scipy.optimize import minimize
from scipy.spatial import cKDTree

from geometry.interpolate import cubic_spline, periodic_cubic_spline, spline_through
from geometry.parameter import node_parameters
from geometry.stations import nearest_order, spring_within


def cosine(n):
    return 0.5 * (1.0 - np.cos(np.linspace(0.0, np.pi, n)))


def section(x, thickness=0.12):
    """Both surfaces from the trailing edge over the nose and back, chord 1.

    Source: E. N. Jacobs, K. E. Ward, R. M. Pinkerton, "The characteristics of 78 related airfoil sections from tests in
    the variable-density wind tunnel", NACA Report 460, 1933: the thickness of the symmetrical sections.
    """
    y = 5.0 * thickness * (0.2969 * np.sqrt(x) - 0.126 * x - 0.3516 * x**2 + 0.2843 * x**3 - 0.1015 * x**4)
    upper, lower = np.stack([x, y], axis=1), np.stack([x, -y], axis=1)
    return np.vstack([upper[::-1], lower[1:]])


@pytest.mark.parametrize(
    ("thickness", "parameter"), [(0.06, "centripetal"), (0.09, "centripetal"), (0.12, "centripetal"), (0.12, "chord")]
)
def test_naca_section_from_26_stations_a_side(thickness, parameter):
    """Thin sections have tight noses, where short chords stand beside longer ones."""
    truth = cKDTree(section(cosine(200_001), thickness))
    sprung = spline_through(section(cosine(26), thickness), parameter=parameter)
    off, _ = truth.query(sprung.evaluate(np.linspace(sprung.knots[0], sprung.knots[-1], 20_001)))
    assert off.max() < 1e-4


def test_naca_nose_alone_needs_both_surfaces():
    """The upper surface for itself begins at a station where its tangent is upright, known from one side only."""
    truth = cKDTree(section(cosine(200_001)))
    upper = spline_through(section(cosine(26))[:26])
    off, _ = truth.query(upper.evaluate(np.linspace(upper.knots[0], upper.knots[-1], 20_001)))
    assert 1e-4 < off.max() < 2e-4


def test_circle_from_8_to_64_stations():
    """The error of a periodic cubic over chord length falls with order 4 (C. de Boor, A Practical Guide to Splines)."""
    errors = []
    for n in (8, 16, 32, 64):
        t = np.linspace(0.0, 2.0 * np.pi, n, endpoint=False)
        sprung = spline_through(np.stack([np.cos(t), np.sin(t)], axis=1), ends="periodic")
        fine = sprung.evaluate(np.linspace(0.0, sprung.knots[-1], 4001))
        errors.append(np.abs(np.linalg.norm(fine, axis=1) - 1.0).max())
    order = np.log2(np.array(errors[:-1]) / errors[1:])
    assert errors[0] < 4e-3
    np.testing.assert_allclose(order, 4.0, atol=0.25)


def least_unfairness(p, u, make, tolerance, tangent):
    """Least unfairness by sequential quadratic programming, and the function that tells it of other moves.

    Unfairness: integrals of the squares of the third derivative across given tangents and of its change along them, and
    the mean square distance weighed as a wave as long as the curve.
    """
    n, closed = len(p), len(u) > len(p)
    step = np.diff(make(p, u).breaks)

    def third(values):
        spline = make(np.stack([values, values], axis=1), u)
        middle = 0.5 * (spline.breaks[1:] + spline.breaks[:-1])
        return spline.evaluate(middle, 3)[:, 0] * np.sqrt(step)

    matrix = np.stack([third(row) for row in np.eye(n)], axis=1)
    anchor = step.mean() * (2.0 * np.pi / (u[-1] - u[0])) ** 6

    def parts(q):
        third = matrix @ q
        along = (third * tangent).sum(axis=1)
        across = third[:, 0] * tangent[:, 1] - third[:, 1] * tangent[:, 0]
        return across, along - np.roll(along, 1) if closed else np.diff(along)

    square = np.zeros((p.size, p.size))
    rows = [np.concatenate(parts(row.reshape(p.shape))) for row in np.eye(p.size)]
    square = np.stack(rows) @ np.stack(rows).T
    scale = 1.0 / np.abs(square @ p.ravel()).max()

    def unfairness(moves):
        q = p.ravel() + moves
        value = q @ square @ q + anchor * (moves @ moves)
        return scale * value, 2.0 * scale * (square @ q + anchor * moves)

    def room(moves):
        return tolerance**2 - (moves.reshape(p.shape) ** 2).sum(axis=1)

    def room_slope(moves):
        out = np.zeros((n, n, 2))
        out[np.arange(n), np.arange(n)] = -2.0 * moves.reshape(p.shape)
        return out.reshape(n, -1)

    found = minimize(
        unfairness,
        np.zeros(p.size),
        jac=True,
        method="SLSQP",
        constraints={"type": "ineq", "fun": room, "jac": room_slope},
        options={"maxiter": 2000, "ftol": 1e-14},
    )
    assert found.success
    return found.fun, lambda moves: unfairness(moves.ravel())[0]


@pytest.mark.parametrize("ends", ["not-a-knot", "natural", "periodic"])
@pytest.mark.parametrize("n", [8, 16])
def test_fairest_curve_within_a_tolerance_agrees_with_scipy_optimize(n, ends):
    closed = ends == "periodic"
    rng = np.random.default_rng(n)
    t = np.linspace(0.0, 2.0 * np.pi if closed else 5.0, n, endpoint=not closed)
    p = np.stack([50.0 * np.cos(t), 30.0 * np.sin(t)] if closed else [20.0 * t, 10.0 * np.sin(t)], axis=1)
    p = p + 0.02 * rng.normal(size=p.shape)
    u = node_parameters(p, closed=closed)
    make = periodic_cubic_spline if closed else lambda q, at: cubic_spline(q, at, ends)
    ours = spring_within(p, u, 0.05, closed, ends="not-a-knot" if closed else ends)
    tangent = ours.evaluate(0.5 * (ours.breaks[1:] + ours.breaks[:-1]), 1)
    tangent /= np.linalg.norm(tangent, axis=1)[:, None]
    least, unfairness = least_unfairness(p, u, make, 0.05, tangent)
    assert unfairness(ours.evaluate(u[:n]) - p) <= 1.005 * least
    assert unfairness(np.zeros_like(p)) > 1.04 * least


@pytest.mark.parametrize(("closed", "most"), [(False, 1.10), (True, 1.12)])
def test_paths_through_random_points_are_near_the_shortest(closed, most):
    """Shortest round trips through n random points of an area A are near 0.7124 sqrt(n A), paths hardly less.

    Source: D. S. Johnson, L. A. McGeoch, "The traveling salesman problem: a case study in local optimization", in Local
    Search in Combinatorial Optimization, Wiley 1997 (the constant; greedy starts with 2-opt come within about 5 %).
    """
    points = np.random.default_rng(7).random((4000, 2))
    order = nearest_order(points, closed)
    path = points[np.append(order, order[0]) if closed else order]
    np.testing.assert_array_equal(np.sort(order), np.arange(4000))
    assert np.linalg.norm(np.diff(path, axis=0), axis=1).sum() <= most * 0.7124 * np.sqrt(4000.0)
