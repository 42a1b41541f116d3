"""Interpolating splines against scipy.interpolate, geomdl and curves known in closed form."""

import numpy as np
import pytest
from geomdl import BSpline as GeomdlBSpline
from scipy.interpolate import BSpline, CubicSpline, make_interp_spline
from scipy.special import fresnel

from geometry.interpolate import (
    cubic_spline,
    linear_spline,
    periodic_cubic_spline,
    periodic_quadratic_spline,
    quadratic_spline,
    quadratic_spline_on_nodes,
    spline_through,
)
from geometry.parameter import chord_length_parameters


def uneven_nodes(seed, n, d):
    rng = np.random.default_rng(seed)
    nodes = np.cumsum(rng.normal(size=(n, d)) + 0.5, axis=0)
    return nodes, np.cumsum(rng.uniform(0.2, 2.0, n))


def agree(ours, reference, derivatives, low, high):
    u = np.linspace(low, high, 1001)[:-1]
    for order in range(derivatives + 1):
        scale = np.abs(reference(u, order)).max()
        np.testing.assert_allclose(ours.evaluate(u, order), reference(u, order), rtol=0.0, atol=1e-12 * scale)


@pytest.mark.parametrize("d", [2, 3])
@pytest.mark.parametrize("n", [4, 5, 12, 200])
@pytest.mark.parametrize("ends", ["natural", "clamped", "not-a-knot"])
def test_cubic_agrees_with_scipy(ends, n, d):
    nodes, u = uneven_nodes(n + d, n, d)
    first, last = np.arange(1.0, d + 1.0), -np.arange(2.0, d + 2.0)
    kind = {"natural": "natural", "clamped": ([(1, first)], [(1, last)]), "not-a-knot": None}[ends]
    reference = make_interp_spline(u, nodes, k=3, bc_type=kind)
    slopes = (first, last) if ends == "clamped" else (None, None)
    ours = cubic_spline(nodes, u, ends, *slopes)
    np.testing.assert_allclose(ours.knots, reference.t, rtol=0.0, atol=1e-14 * u[-1])
    size = np.abs(reference.c).max()
    np.testing.assert_allclose(ours.control, reference.c, rtol=0.0, atol=1e-12 * size)
    agree(ours, reference, 1, u[0], u[-1])


@pytest.mark.parametrize("n", [2, 3])
@pytest.mark.parametrize("ends", ["natural", "not-a-knot"])
def test_few_nodes_agree_with_scipy(ends, n):
    nodes, u = uneven_nodes(n, n, 2)
    agree(cubic_spline(nodes, u, ends), CubicSpline(u, nodes, bc_type=ends), 1, u[0], u[-1])


@pytest.mark.parametrize("n", [3, 4, 17, 200])
def test_periodic_cubic_agrees_with_scipy(n):
    nodes, u = uneven_nodes(n, n, 2)
    u = np.append(u, u[-1] + 0.7)
    reference = CubicSpline(u, np.vstack([nodes, nodes[:1]]), bc_type="periodic")
    ours = periodic_cubic_spline(nodes, u)
    agree(ours, reference, 1, u[0], u[-1])
    for order in (0, 1, 2):  # the seam
        end = reference(u[-1], order)
        np.testing.assert_allclose(
            ours.evaluate(u[:1], order)[0], end, rtol=0.0, atol=1e-9 * max(1.0, np.abs(end).max())
        )


@pytest.mark.parametrize("d", [2, 3])
@pytest.mark.parametrize("n", [3, 4, 5, 12, 200])
def test_quadratic_with_knots_between_nodes_agrees_with_scipy(n, d):
    nodes, u = uneven_nodes(n + d, n, d)
    reference = make_interp_spline(u, nodes, k=2)  # its default knots for an even degree are the same
    ours = quadratic_spline(nodes, u)
    np.testing.assert_allclose(ours.knots, reference.t, rtol=0.0, atol=1e-14 * u[-1])
    agree(ours, reference, 1, u[0], u[-1])


def test_quadratic_on_nodes_agrees_with_scipy():
    nodes, u = uneven_nodes(3, 14, 2)
    start = np.array([0.3, -1.2])
    knots = np.concatenate([u[[0, 0]], u, u[[-1, -1]]])
    reference = make_interp_spline(u, nodes, k=2, t=knots, bc_type=([(1, start)], None))
    agree(quadratic_spline_on_nodes(nodes, u, start), reference, 1, u[0], u[-1])


@pytest.mark.parametrize("n", [3, 4, 5, 40])
def test_periodic_quadratic_agrees_with_a_dense_collocation_by_scipy(n):
    nodes, u = uneven_nodes(n, n, 2)
    u = np.append(u, u[-1] + 1.1)
    period = u[-1] - u[0]
    middles = 0.5 * (u[1:] + u[:-1])
    wide = np.concatenate([middles + k * period for k in range(-2, 3)])  # the knots, five periods of them
    matrix = BSpline.design_matrix(u[:-1], wide, 2).toarray()
    folded = sum(
        np.pad(matrix, ((0, 0), (0, -len(matrix[0]) % n))).reshape(n, -1, n)[:, k]
        for k in range(-(-len(matrix[0]) // n))
    )
    control = np.linalg.solve(folded, nodes)
    reference = BSpline(wide, np.vstack([control] * 6)[: len(wide) - 3], 2)
    ours = periodic_quadratic_spline(nodes, u)
    agree(ours, lambda v, order: reference(v, nu=order), 1, u[0], u[-1])
    assert ours.closed
    np.testing.assert_allclose(ours.evaluate(u[:1], 1)[0], reference(u[-1], nu=1), rtol=0.0, atol=1e-9)


def test_linear_agrees_with_numpy():
    nodes, u = uneven_nodes(8, 9, 3)
    where = np.linspace(u[0], u[-1], 333)
    found = linear_spline(nodes, u).evaluate(where)
    for axis in range(3):
        np.testing.assert_allclose(
            found[:, axis], np.interp(where, u, nodes[:, axis]), rtol=0.0, atol=1e-13 * np.abs(nodes).max()
        )


@pytest.mark.parametrize("ends", ["natural", "not-a-knot", "periodic"])
@pytest.mark.parametrize("degree", [2, 3])
def test_geomdl_finds_the_same_points_on_the_written_spline(degree, ends):
    nodes, _ = uneven_nodes(degree, 15, 2)
    ours = spline_through(nodes, degree, ends)
    other = GeomdlBSpline.Curve(normalize_kv=False)
    other.degree = degree
    other.ctrlpts = ours.control.tolist()
    other.knotvector = ours.knots.tolist()
    u = np.linspace(ours.knots[0], ours.knots[-1], 57)
    np.testing.assert_allclose(
        ours.evaluate(u), other.evaluate_list(u.tolist()), rtol=0.0, atol=1e-12 * np.abs(nodes).max()
    )


def clothoid(t):
    s, c = fresnel(t)
    return np.stack([c, s], axis=1)


@pytest.mark.parametrize(
    ("make", "order"),
    [
        (cubic_spline, 4),
        (lambda p, u: cubic_spline(p, u, "clamped", np.array([1.0, 0.0]), clothoid_slope(1.2)), 4),
        (quadratic_spline, 3),
    ],
)
def test_order_of_convergence_on_a_clothoid(make, order):
    """Abramowitz and Stegun 7.3: (C, S) is traced at unit speed. C4 data: 5/384 h^4 and kin (Hall and Meyer 1976)."""
    errors = []
    for n in (16, 32, 64, 128):
        t = np.linspace(0.0, 1.2, n + 1)
        spline = make(clothoid(t), t)
        fine = np.linspace(0.0, 1.2, 20 * n + 7)
        errors.append(np.linalg.norm(spline.evaluate(fine) - clothoid(fine), axis=1).max())
    orders = np.log2(np.array(errors[:-1]) / np.array(errors[1:]))
    assert orders[-1] == pytest.approx(order, abs=0.15)


def clothoid_slope(t):
    return np.array([np.cos(0.5 * np.pi * t * t), np.sin(0.5 * np.pi * t * t)])


@pytest.mark.parametrize(("degree", "order"), [(3, 4), (2, 3)])
def test_chord_length_keeps_the_order_on_the_clothoid(degree, order):
    """Floater 2006, "Chordal cubic spline interpolation is fourth-order accurate": the distance to the curve."""
    errors = []
    for n in (32, 64, 128):
        nodes = clothoid(np.linspace(0.0, 1.2, n + 1))
        points = spline_through(nodes, degree).evaluate(np.linspace(0.0, chord_length_parameters(nodes)[-1], 30 * n))
        t = np.linspace(0.0, 1.2, len(points))
        for _ in range(4):  # foot points on the clothoid: unit speed pi / 2 apart, so the step is the tangential part
            slope = np.stack([np.cos(0.5 * np.pi * t * t), np.sin(0.5 * np.pi * t * t)], axis=1)
            away = points - clothoid(t)
            bend = np.pi * t * np.einsum("ij,ij->i", away, np.stack([-slope[:, 1], slope[:, 0]], axis=1))
            t = t + np.einsum("ij,ij->i", away, slope) / (1.0 - bend)
        errors.append(np.linalg.norm(points - clothoid(t), axis=1).max())
    assert np.log2(errors[-2] / errors[-1]) == pytest.approx(order, abs=0.25)


@pytest.mark.parametrize(("degree", "order"), [(3, 4), (2, 4)])
def test_a_circle_from_eight_to_sixty_four_stations(degree, order):
    """Measured orders of the largest error of the radius; by symmetry a quadratic gains one order over its usual 3."""
    errors = []
    for n in (8, 16, 32, 64):
        angle = 2.0 * np.pi * np.arange(n) / n
        spline = spline_through(np.stack([np.cos(angle), np.sin(angle)], axis=1), degree, "periodic")
        u = np.linspace(spline.knots[0], spline.knots[-1], 40 * n)
        errors.append(np.abs(np.linalg.norm(spline.evaluate(u), axis=1) - 1.0).max())
    assert np.log2(errors[-2] / errors[-1]) == pytest.approx(order, abs=0.1)
