"""Limits that differ by side: decided against dense samples and known offsets."""

import numpy as np
import pytest

from geometry.arcs import ArcChain, full_circle
from geometry.errors import GeometryError
from geometry.polyline import Polyline
from geometry.sides import within_sides
from geometry.signed import signed_distances

SQUARE = Polyline(np.array([[0.0, 0.0], [10.0, 0.0], [10.0, 10.0], [0.0, 10.0]]), True)
LINE = Polyline(np.array([[0.0, 0.0], [10.0, 0.0]]))


def ring(radius, clockwise=False):
    chain = full_circle(np.array([3.0, 4.0]), radius)
    return chain.reversed() if clockwise else chain


@pytest.mark.parametrize("clockwise", [False, True])
@pytest.mark.parametrize(
    ("radius", "plus", "minus", "inside"),
    [
        (10.29, 0.3, 0.1, True),
        (10.31, 0.3, 0.1, False),
        (9.91, 0.3, 0.1, True),
        (9.89, 0.3, 0.1, False),
        (10.0999, 0.1, 0.3, True),
        (10.1001, 0.1, 0.3, False),
    ],
)
def test_a_circle_about_a_circle(radius, plus, minus, inside, clockwise):
    found = within_sides(ring(radius), ring(10.0, clockwise), plus, minus)
    assert found.inside is inside
    if not inside:
        assert abs(np.hypot(*(np.array(found.point) - [3.0, 4.0])) - radius) < 1e-3
        assert found.deviation == pytest.approx(radius - 10.0, abs=0.01)


def test_at_the_limit_itself_nothing_can_be_told():
    assert within_sides(ring(10.3), ring(10.0), 0.3, 0.1).inside is None


def test_a_needle_between_the_vertices_of_a_long_chord_is_found():
    bump = Polyline(
        np.array([[0.0, 0.0], [4.99, 0.0], [5.0, -0.25], [5.01, 0.0], [10.0, 0.0], [10.0, 10.0], [0, 10.0]]), True
    )
    assert within_sides(bump, SQUARE, 0.3, 0.1).inside is True  # outside, where the wide limit holds
    dent = Polyline(bump.points * [1.0, -1.0] * np.where(bump.points[:, 1:] < 0, 1.0, -1.0), True)
    assert within_sides(dent, SQUARE, 0.3, 0.1).inside is False


def test_left_and_right_of_an_open_curve():
    above = Polyline(np.array([[0.0, 0.2], [10.0, 0.2]]))
    assert within_sides(above, LINE, 0.3, 0.1).inside is True
    assert within_sides(above, LINE, 0.1, 0.3).inside is False
    assert within_sides(above, LINE.reversed(), 0.1, 0.3).inside is True


def test_beyond_an_end_its_prolongation_parts_the_sides():
    longer = Polyline(np.array([[0.0, 0.2], [10.2, 0.05]]))
    assert within_sides(longer, LINE, 0.3, 0.1).inside is True
    assert within_sides(longer, LINE, 0.2, 0.1).inside is False  # 0.206 from the end
    assert within_sides(Polyline(longer.points * [1.0, -1.0]), LINE, 0.3, 0.1).inside is False
    round_the_end = Polyline(np.array([[9.0, 0.2], [10.2, 0.0], [10.2, -0.05]]))
    assert within_sides(round_the_end, LINE, 0.3, 0.1).inside is False


def test_a_reference_that_crosses_itself_has_inside_by_the_even_odd_rule():
    bow = Polyline(np.array([[0.0, 0.0], [10.0, 10.0], [10.0, 0.0], [0.0, 10.0]]), True)
    probe = Polyline(np.array([[9.0, 4.0], [9.0, 6.0]]))  # inside the right lobe, 1 from its side
    assert within_sides(probe, bow, 0.1, 1.1).inside is True
    assert within_sides(probe, bow, 1.1, 0.1).inside is False


@pytest.mark.parametrize("seed", range(40))
def test_decisions_agree_with_dense_samples(seed):
    rng = np.random.default_rng(seed)
    angle = np.sort(rng.uniform(0.0, 2.0 * np.pi, 12))
    points = np.stack([np.cos(angle), np.sin(angle)], axis=1) * rng.uniform(8.0, 10.0, (12, 1))
    closed = bool(rng.random() < 0.7)
    reference = ArcChain(points, rng.uniform(-0.2, 0.2, 12 if closed else 11), closed)
    curve = Polyline(
        reference.flatten(0.05).points + rng.normal(0.0, 0.05, (len(reference.flatten(0.05).points), 2)), closed
    )
    plus, minus = rng.uniform(0.05, 0.5, 2)
    found = within_sides(curve, reference, plus, minus)
    dense = curve.at(np.linspace(0.0, curve.length(), 20_001))
    signed = signed_distances(dense, reference, 1e-6, crossing=closed)
    over = np.where(signed > 0.0, signed - plus, -signed - minus)
    if over.max() > 1e-3:
        assert found.inside is False
    elif over.max() < -0.02:
        assert found.inside is True
    if found.inside is False:
        assert over.max() > -1e-3


def test_a_side_that_changes_between_two_strands_is_no_reason_for_a_verdict():
    """NEW runs along the middle between two strands that run the same way, left of one and right of the other."""
    tail = np.array([[1.0, 4.8], [0.9, 5.0], [1.0, 5.2], [1.0, 10.0]])  # a bay that makes the other side the nearer
    hook = Polyline(np.vstack([[[0, 0], [0, 10.0], [-3, 10], [-3, -3], [1, -3]], tail]))
    between = Polyline(np.array([[0.48, 4.6], [0.48, 5.4]]))
    assert within_sides(between, hook, 0.1, 0.6).inside is False
    assert within_sides(between, hook, 0.6, 0.6).inside is True


def test_limits_must_be_above_nothing():
    with pytest.raises(GeometryError, match="both must be numbers above 0"):
        within_sides(LINE, LINE, 0.1, 0.0)
