import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from geometry.errors import CoincidentNodesError, GeometryError, NotFiniteError, TooFewPointsError
from geometry.interpolate import (
    cubic_spline,
    linear_spline,
    periodic_cubic_spline,
    periodic_quadratic_spline,
    quadratic_spline,
    quadratic_spline_on_nodes,
    spline_through,
)

WAYS = [
    *[(3, ends) for ends in ("natural", "clamped", "not-a-knot", "periodic")],
    *[(degree, ends) for degree in (1, 2) for ends in ("natural", "periodic")],
]


def slopes(ends, d):
    return {"start": np.eye(d)[0], "end": np.eye(d)[1]} if ends == "clamped" else {}


def jumps(spline, order):
    """Largest jump of a derivative at inner knots, its size over the size of the derivative."""
    b, h = spline.beziers, np.diff(spline.breaks)
    for _ in range(order):
        b = np.diff(b, axis=1)
    scale = (h**order)[:, None]
    before, after = b[:-1, -1] / scale[:-1], b[1:, 0] / scale[1:]
    return np.abs(after - before).max(initial=0.0) / max(np.abs(b / scale[:, None]).max(), 1e-300)


@settings(max_examples=40, deadline=None)
@given(seed=st.integers(0, 10_000), n=st.integers(3, 40), d=st.sampled_from([2, 3]), way=st.sampled_from(WAYS))
def test_splines_pass_through_their_nodes_and_are_smooth(seed, n, d, way):
    nodes = np.random.default_rng(seed).normal(size=(n, d)) * 10.0 + 100.0
    degree, ends = way
    spline = spline_through(nodes, degree, ends, **slopes(ends, d))
    steps = np.linalg.norm(np.diff(np.vstack([nodes, nodes[:1]]), axis=0), axis=1)
    u = np.concatenate([[0.0], np.cumsum(steps)])[:n]
    scale = max(1.0, np.abs(spline.control).max())
    np.testing.assert_allclose(spline.evaluate(u), nodes, rtol=0.0, atol=1e-9 * scale)
    assert spline.closed == (ends == "periodic")
    for order in range(1, degree):
        assert jumps(spline, order) < 1e-7
        if spline.closed:
            ends_meet = [spline.evaluate(np.array([v]), order)[0] for v in (spline.knots[0], spline.knots[-1])]
            np.testing.assert_allclose(*ends_meet, rtol=0.0, atol=1e-7 * max(1.0, np.abs(ends_meet).max()))
            np.testing.assert_array_equal(spline.control[0], spline.control[-1])


@settings(max_examples=40, deadline=None)
@given(
    seed=st.integers(0, 10_000),
    angle=st.floats(0.0, 6.3),
    factor=st.sampled_from([1e-3, 1.0, 25.4]),
    way=st.sampled_from(WAYS),
    kind=st.sampled_from(["chord", "centripetal", "uniform"]),
)
def test_placing_the_nodes_places_the_curve(seed, angle, factor, way, kind):
    nodes = np.random.default_rng(seed).normal(size=(9, 2))
    degree, ends = way
    c, s = np.cos(angle), np.sin(angle)
    turn = factor * np.array([[c, s], [-s, c]])
    shift = np.array([500.0, -20.0]) * factor
    ways = slopes(ends, 2)
    # a slope is per unit of parameter, whose own unit is that of the drawing, its root, or none
    per = factor ** {"chord": 1.0, "centripetal": 0.5, "uniform": 0.0}[kind]
    placed = {name: slope @ turn / per for name, slope in ways.items()}
    before = spline_through(nodes, degree, ends, kind, **ways)
    after = spline_through(nodes @ turn + shift, degree, ends, kind, **placed)
    size = factor * max(1.0, np.abs(before.control).max())
    np.testing.assert_allclose(
        after.control, before.control @ turn + shift, rtol=0.0, atol=1e-9 * (size + 500 * factor)
    )


@pytest.mark.parametrize("make", [quadratic_spline, cubic_spline])
def test_reversing_the_nodes_reverses_the_curve(make):
    nodes = np.random.default_rng(5).normal(size=(11, 2))
    u = np.cumsum(np.random.default_rng(6).uniform(0.5, 2.0, 11))
    there, back = make(nodes, u), make(nodes[::-1], u[-1] - u[::-1] + u[0])
    np.testing.assert_allclose(back.control, there.control[::-1], rtol=0.0, atol=1e-12)


@pytest.mark.parametrize(("degree", "make"), [(2, quadratic_spline), (2, quadratic_spline_on_nodes), (3, cubic_spline)])
def test_polynomials_of_the_degree_are_reproduced(degree, make):
    u = np.cumsum(np.random.default_rng(7).uniform(0.5, 2.0, 10))
    x = np.polynomial.Polynomial([1.0, -2.0, 0.5, 0.1][: degree + 1])
    y = np.polynomial.Polynomial([0.0, 1.0, -0.3, 0.02][: degree + 1])
    spline = make(np.stack([x(u), y(u)], axis=1), u)
    fine = np.linspace(u[0], u[-1], 99)
    np.testing.assert_allclose(spline.evaluate(fine), np.stack([x(fine), y(fine)], axis=1), rtol=0.0, atol=1e-10)


def test_end_conditions_do_what_they_say():
    nodes = np.random.default_rng(8).normal(size=(8, 2))
    u = np.arange(8.0)
    natural = cubic_spline(nodes, u, "natural")
    np.testing.assert_allclose(natural.evaluate(u[[0, -1]], 2), 0.0, atol=1e-12)
    start, end = np.array([2.0, -1.0]), np.array([0.5, 3.0])
    clamped = cubic_spline(nodes, u, "clamped", start, end)
    np.testing.assert_allclose(clamped.evaluate(u[[0, -1]], 1), [start, end], atol=1e-12)
    assert len(cubic_spline(nodes, u, "not-a-knot").spans) == 5  # seven pieces, two pairs of them one polynomial


def test_an_error_at_one_node_dies_between_knots_and_rings_on_nodes():
    u = np.arange(31.0)
    straight = np.stack([u, np.zeros_like(u)], axis=1)
    bumped = straight.copy()
    bumped[5, 1] = 1.0
    late = np.linspace(20.0, 30.0, 200)
    assert np.abs(quadratic_spline(bumped, u).evaluate(late)[:, 1]).max() < 1e-9
    assert np.abs(quadratic_spline_on_nodes(bumped, u).evaluate(late)[:, 1]).max() > 0.5


def test_two_nodes_and_slopes():
    nodes, u = np.array([[0.0, 0.0], [4.0, 2.0]]), np.array([0.0, 1.0])
    for ends in ("natural", "not-a-knot"):
        np.testing.assert_allclose(cubic_spline(nodes, u, ends).evaluate(np.array([0.5])), [[2.0, 1.0]], atol=1e-15)
    bent = quadratic_spline_on_nodes(nodes, u, np.array([0.0, 4.0]))
    np.testing.assert_allclose(bent.evaluate(np.array([0.0, 1.0]), 1), [[0.0, 4.0], [8.0, 0.0]], atol=1e-14)
    np.testing.assert_allclose(quadratic_spline_on_nodes(nodes, u).evaluate(np.array([0.5])), [[2.0, 1.0]])


def test_far_from_the_origin_nothing_is_lost():
    nodes = np.random.default_rng(9).uniform(0.0, 100.0, (20, 2))
    far = np.array([5e5, 5e6])
    for degree in (2, 3):
        near, away = (spline_through(p, degree, "natural") for p in (nodes, nodes + far))
        np.testing.assert_allclose(away.control - far, near.control, rtol=0.0, atol=1e-6)


def test_unusable_input_is_named():
    nodes, u = np.array([[0.0, 0.0], [1.0, 0.0], [1.0, 1.0], [0.0, 1.0]]), np.arange(4.0)
    with pytest.raises(GeometryError, match="degree of 4"):
        spline_through(nodes, 4)
    with pytest.raises(GeometryError, match="no end condition 'free'"):
        spline_through(nodes, 3, "free")
    with pytest.raises(GeometryError, match="no end condition 'periodic'"):
        cubic_spline(nodes, u, "periodic")
    with pytest.raises(GeometryError, match="slope at both ends"):
        spline_through(nodes, 3, "clamped", start=np.array([1.0, 0.0]))
    for degree, ends in ((3, "natural"), (2, "periodic"), (1, "natural")):
        with pytest.raises(GeometryError, match="slope at an end cannot be used"):
            spline_through(nodes, degree, ends, start=np.array([1.0, 0.0]))
    with pytest.raises(GeometryError, match="slope at an end cannot be used"):
        spline_through(nodes, 2, "natural", end=np.array([1.0, 0.0]))
    with pytest.raises(GeometryError, match="3 parameters do not fit 4 nodes; give 4"):
        cubic_spline(nodes, u[:3])
    with pytest.raises(GeometryError, match="4 parameters do not fit 4 nodes; give 5"):
        periodic_cubic_spline(nodes, u)
    with pytest.raises(GeometryError, match="increase"):
        quadratic_spline(nodes, np.array([0.0, 1.0, 1.0, 2.0]))
    with pytest.raises(GeometryError, match="shape"):
        linear_spline(u, u)
    with pytest.raises(NotFiniteError):
        periodic_quadratic_spline(np.array([[0.0, 0.0], [np.nan, 0.0], [1.0, 1.0]]), u)
    with pytest.raises(TooFewPointsError):
        quadratic_spline(nodes[:2], u[:2])
    with pytest.raises(CoincidentNodesError):
        spline_through(nodes[[0, 1, 1, 2]])
