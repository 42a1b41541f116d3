import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from geometry.errors import CoincidentNodesError, GeometryError, NotFiniteError, TooFewPointsError
from geometry.parameter import (
    centripetal_parameters,
    chord_length_parameters,
    node_parameters,
    uniform_parameters,
)

NODES = np.array([[0.0, 0.0], [3.0, 4.0], [3.0, 5.0], [3.0, 9.0]])
SPACE = np.array([[0.0, 0.0, 0.0], [2.0, 3.0, 6.0], [2.0, 3.0, 10.0]])


def test_open_values_by_hand():
    np.testing.assert_allclose(chord_length_parameters(NODES), [0.0, 5.0, 6.0, 10.0])
    np.testing.assert_allclose(centripetal_parameters(NODES), np.cumsum([0.0, np.sqrt(5.0), 1.0, 2.0]))
    np.testing.assert_array_equal(uniform_parameters(NODES), [0.0, 1.0, 2.0, 3.0])


def test_closed_and_spatial_values_by_hand():
    np.testing.assert_allclose(chord_length_parameters(NODES[:3], closed=True), [0, 5, 6, 6 + np.sqrt(34.0)])
    np.testing.assert_allclose(chord_length_parameters(SPACE), [0.0, 7.0, 11.0])
    np.testing.assert_allclose(centripetal_parameters(SPACE), [0.0, np.sqrt(7.0), np.sqrt(7.0) + 2.0])
    np.testing.assert_array_equal(uniform_parameters(SPACE, closed=True), [0.0, 1.0, 2.0, 3.0])


def test_kinds_by_name():
    for kind, function in (
        ("chord", chord_length_parameters),
        ("centripetal", centripetal_parameters),
        ("uniform", uniform_parameters),
    ):
        np.testing.assert_array_equal(node_parameters(NODES, kind), function(NODES))
    with pytest.raises(GeometryError, match="no parameter kind 'arc'"):
        node_parameters(NODES, "arc")


@pytest.mark.parametrize("kind", ["chord", "centripetal", "uniform"])
def test_unusable_nodes_are_named(kind):
    with pytest.raises(CoincidentNodesError, match=r"nodes 1 and 2 coincide at \(3, 4\)"):
        node_parameters(np.array([[0.0, 0.0], [3.0, 4.0], [3.0, 4.0], [1.0, 1.0]]), kind)
    with pytest.raises(CoincidentNodesError) as caught:
        node_parameters(np.array([[0.0, 0.0], [1.0, 0.0], [1.0, 1.0], [0.0, 0.0]]), kind, closed=True)
    assert caught.value.index == 3
    with pytest.raises(NotFiniteError, match="point 1"):
        node_parameters(np.array([[0.0, 0.0], [np.inf, 4.0]]), kind)
    with pytest.raises(TooFewPointsError):
        node_parameters(NODES[:1], kind)
    with pytest.raises(TooFewPointsError):
        node_parameters(NODES[:2], kind, closed=True)


def test_a_chord_that_is_lost_in_rounding_is_refused():
    with pytest.raises(CoincidentNodesError):
        chord_length_parameters(np.array([[0.0, 0.0], [1e17, 0.0], [1e17, 1.0]]))


@given(seed=st.integers(0, 10_000), factor=st.floats(1e-3, 1e3), angle=st.floats(0.0, 6.3))
def test_moving_turning_and_scaling(seed, factor, angle):
    nodes = np.random.default_rng(seed).normal(size=(9, 2))
    c, s = np.cos(angle), np.sin(angle)
    placed = factor * nodes @ np.array([[c, s], [-s, c]]) + np.array([30.0, -7.0]) * factor
    np.testing.assert_allclose(chord_length_parameters(placed), factor * chord_length_parameters(nodes), rtol=1e-12)
    np.testing.assert_allclose(
        centripetal_parameters(placed, True), np.sqrt(factor) * centripetal_parameters(nodes, True), rtol=1e-12
    )
    whole = chord_length_parameters(nodes)
    np.testing.assert_allclose(chord_length_parameters(nodes[::-1]), whole[-1] - whole[::-1], atol=1e-12 * whole[-1])
