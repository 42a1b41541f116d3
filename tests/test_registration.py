"""Registration: known moves are given back, whatever a fifth of the outline does."""

import numpy as np
import pytest

from geometry.arcs import ArcChain, full_circle
from geometry.bspline import Spline
from geometry.errors import GeometryError, TooFewPointsError
from geometry.polyline import Polyline
from geometry.registration import Move, moved_curve, rigid_move
from tests.tracing import staircase


def outline(seed, bump=0.0, share=0.2):
    """A smooth closed outline about 80 across; a bump may cover a share of it."""
    rng = np.random.default_rng(seed)
    angle = np.linspace(0.0, 2.0 * np.pi, 1500, endpoint=False)
    radius = 40.0 + sum(rng.uniform(-5.0, 5.0) * np.cos(k * angle + rng.uniform(0.0, 6.0)) for k in (2, 3, 4, 5))
    inside = (angle > 1.0) & (angle < 1.0 + 2.0 * np.pi * share)
    radius = radius + bump * inside * np.sin((angle - 1.0) / (2.0 * share)) ** 2
    return Polyline(radius[:, None] * np.stack([np.cos(angle), np.sin(angle)], axis=1), True)


def displaced(curve, seed):
    """The curve moved by a known move, and where the move takes it."""
    rng = np.random.default_rng(100 + seed)
    move = Move(*rng.uniform(-300.0, 300.0, 2), rng.uniform(-np.pi, np.pi))
    return moved_curve(move, curve), move


@pytest.mark.parametrize("seed", range(12))
def test_a_moved_and_turned_copy_comes_back_with_a_fifth_of_it_changed(seed):
    old, changed = outline(seed), outline(seed, bump=(6.0, -6.0)[seed % 2])
    new, move = displaced(changed, seed)
    found = rigid_move([old], [new])
    assert np.abs(moved_curve(found, new).points - changed.points).max() < 1e-4
    assert np.angle(np.exp(1j * (found.angle + move.angle))) == pytest.approx(0.0, abs=1e-6)
    assert found.scale == 1.0


@pytest.mark.parametrize("seed", range(4))
def test_an_exact_copy_comes_back_to_rounding(seed):
    old = outline(seed)
    new, _ = displaced(old, seed)
    assert np.abs(moved_curve(rigid_move([old], [new]), new).points - old.points).max() < 1e-9


def test_plates_with_holes_are_laid_on_as_wholes():
    """One hole moved, one gone, one new: a plate with its holes in no order."""
    rim = ArcChain(np.array([[0.0, 0], [100, 0], [100, 60], [0, 60]]), np.array([0.0, 0.1, 0.0, 0.0]), True)
    old = [rim, *(full_circle(np.array(place), 4.0) for place in ((10.0, 10), (90.0, 10), (60.0, 45)))]
    new = [full_circle(np.array(place), 4.0) for place in ((90.0, 10), (62.0, 45), (30.0, 30))]
    move = Move(-40.0, 25.0, 2.0)
    found = rigid_move(old, [moved_curve(move, curve) for curve in (*new, rim)])
    back = found.apply(move.apply(rim.points))
    assert np.abs(back - rim.points).max() < 1e-4


def test_an_open_curve_drawn_the_other_way_is_laid_on():
    x = np.linspace(0.0, 100.0, 400)
    old = Polyline(np.stack([x, 8.0 * np.sin(x / 17.0) + 0.001 * x**2], axis=1))
    new, _ = displaced(old.reversed(), 3)
    assert np.abs(moved_curve(rigid_move([old], [new]), new).points[::-1] - old.points).max() < 1e-9


def test_two_tracings_of_one_shape_are_laid_on_within_their_scatter():
    rng = np.random.default_rng(7)
    old, true = outline(1), outline(1, bump=5.0)
    noisy = [Polyline(c.points + rng.normal(0.0, 0.02, c.points.shape), True) for c in (old, true)]
    new, move = displaced(noisy[1], 5)
    found = rigid_move([noisy[0]], [new])
    assert np.abs(found.apply(move.apply(true.points)) - true.points).max() < 0.02


@pytest.mark.parametrize("factor", [1.001, 0.999, 1.02, 0.97])
def test_another_size_is_pointed_out_and_not_made(factor):
    old = outline(2)
    move = Move(5.0, -3.0, 0.7)
    new = Polyline(move.apply(outline(2, bump=4.0).points * factor), True)
    found = rigid_move([old], [new])
    assert found.scale == pytest.approx(1.0 / factor, abs=1e-6)
    assert moved_curve(found, new).length() == pytest.approx(new.length(), rel=1e-12)


@pytest.mark.parametrize("factor", [25.4, 1.0 / 25.4, 1.001])
@pytest.mark.parametrize("seed", [0, 2, 4, 5])
def test_units_mixed_up_are_pointed_out(factor, seed):
    """A shape shrunk to a point of the outline would lie on it as well."""
    old = outline(seed)
    new = Polyline(Move(50.0, 3.0, 0.5).apply(old.points * factor), True)
    assert rigid_move([old], [new]).scale == pytest.approx(1.0 / factor, rel=1e-6)


def test_of_equal_moves_the_smallest_turn_is_taken():
    square = Polyline(np.array([[0.0, 0.0], [10.0, 0.0], [10.0, 10.0], [0.0, 10.0]]), True)
    turned = Polyline(Move(30.0, 0.0, np.radians(50.0)).apply(square.points), True)
    assert np.degrees(rigid_move([square], [turned]).angle) == pytest.approx(40.0, abs=1e-6)
    ring = full_circle(np.array([1.0, 2.0]), 5.0)
    found = rigid_move([ring], [ring.moved(np.array([7.0, -3.0]))])
    assert (found.dx, found.dy, found.angle) == pytest.approx((-7.0, 3.0, 0.0), abs=1e-9)


def test_far_from_the_origin_nothing_is_lost():
    old = outline(3)
    far = old.moved(np.array([5.0e6, -4.0e6]))
    new = Polyline(Move(2.0, 1.0, 0.3, (5.0e6, -4.0e6)).apply(far.points), True)
    found = rigid_move([far], [new])
    assert np.abs(found.apply(new.points) - far.points).max() < 1e-7


def _middle(ring):
    return tuple(ring.points.mean(axis=0).tolist())


@pytest.mark.parametrize("turn", [0.5, 2.0, 20.0, 61.0, 170.0])
def test_a_small_feature_tells_how_a_symmetric_part_is_turned(turn):
    disc = full_circle(np.zeros(2), 50.0)
    keyhole = [disc, full_circle(np.array([45.0, 0.0]), 1.5)]
    around = np.radians(60.0 * np.arange(6))
    flange = [disc, *(full_circle(38.0 * np.array([np.cos(a), np.sin(a)]), 5.0 if a == 0 else 4.0) for a in around)]
    move = Move(0.0, 0.0, np.radians(turn))
    for part in (keyhole, flange):
        for start in (0.0, -turn):  # circles begin where they did before they were turned, or anew
            back = Move(0.0, 0.0, np.radians(start))
            turned = [moved_curve(Move(0.0, 0.0, back.angle, _middle(c)), c) for c in part]
            found = rigid_move(part, [moved_curve(move, curve) for curve in turned])
            assert np.degrees(found.angle) == pytest.approx(-turn, abs=1e-5)


@pytest.mark.parametrize("lift", [0.1, 0.5, 2.0])
def test_an_end_that_was_lifted_draws_nothing_along(lift):
    t = np.linspace(0.0, 1.0, 400)
    y = 20.0 * np.sin(5.0 * t) + 8.0 * np.sin(11.0 * t)
    old = Polyline(np.column_stack([300.0 * t, y]))
    new = Polyline(np.column_stack([300.0 * t, y + np.where(t > 0.75, lift, 0.0)]))
    found = rigid_move([old], [new])
    assert np.abs(found.apply(new.points) - new.points).max() < 1e-9


def test_an_arc_does_not_slide_along_itself():
    arc = ArcChain(np.array([[0.0, 0.0], [100.0, 0.0]]), np.array([0.3]))
    move = Move(-70.0, 12.0, 1.1)
    found = rigid_move([arc], [moved_curve(move, arc)])
    assert np.abs(found.apply(move.apply(arc.points)) - arc.points).max() < 1e-9


def test_staircases_are_laid_step_on_step():
    steps = Polyline(staircase(outline(4).points * 5.0).astype(float), True)
    new, _ = displaced(steps, 9)
    assert np.abs(moved_curve(rigid_move([steps], [new]), new).points - steps.points).max() < 1e-6


def test_every_kind_of_curve_is_moved_as_a_body():
    move = Move(1.0, 2.0, 0.5, (3.0, 4.0))
    spline = Spline(np.array([0.0, 0, 0, 0, 1, 1, 1, 1]), np.array([[0.0, 0], [1, 2], [3, 2], [4, 0]]), 3)
    chain = ArcChain(np.array([[0.0, 0.0], [4.0, 0.0], [4.0, 2.0]]), np.array([0.2, 1.0]))
    for curve in (spline, chain, outline(0)):
        moved = moved_curve(move, curve)
        assert moved.length() == pytest.approx(curve.length(), rel=1e-12)
        assert np.allclose(moved.flatten(1e-3).points[0], move.apply(curve.flatten(1e-3).points[:1])[0])


def test_what_cannot_be_laid_on_is_refused():
    with pytest.raises(TooFewPointsError):
        rigid_move([], [outline(0)])
    with pytest.raises(GeometryError, match="give their plan"):
        rigid_move([outline(0)], [Polyline(np.zeros((2, 3)))])
    with pytest.raises(GeometryError, match="no length"):
        rigid_move([outline(0)], [Polyline(np.ones((2, 2)))])
