"""How curves are written: forms and their limits, rounding, counts, least numbers, radii that are not kept."""

import numpy as np
import pytest

from converter.jobs.corners import outline_corners
from converter.jobs.forms import Search
from converter.jobs.writing import (
    Writing,
    beyond_radii,
    counts_of,
    economised,
    least_of,
    rounded,
    rounding_of,
    sharper_turns,
)
from geometry.arcs import ArcChain, full_circle
from geometry.bspline import Spline
from geometry.circle import circle_spline
from geometry.deviation import hausdorff
from geometry.polyline import Polyline
from tests.traced_drawings import HOOK
from tests.traced_drawings import rounded as rounded_outline

NO_MARKS = np.zeros((0, 2))
CENTRE, RADIUS = np.array([3.0, 4.0]), 25.0
RING = circle_spline(CENTRE, RADIUS, 1e-9, 3)


def search(points=HOOK, tolerance=1.0, slack=0.0):
    outline = Polyline(np.asarray(points, dtype=float), True)
    corners, _ = outline_corners(outline, tolerance, None, NO_MARKS)
    return Search(outline, corners, tolerance, 3, slack)


def test_vertices_on_the_curve_lie_on_it_and_free_ones_are_fewer():
    free = economised(RING, None, 0.05, Writing("lines"))
    on = economised(RING, None, 0.05, Writing("lines", on_curve=True))
    assert np.abs(np.linalg.norm(on.points - CENTRE, axis=1) - RADIUS).max() < 1e-6
    assert np.linalg.norm(free.points - CENTRE, axis=1).max() > RADIUS + 0.01
    assert len(free.points) < 0.8 * len(on.points)


def test_steps_and_turns_keep_their_limits():
    path = economised(RING, None, 0.5, Writing("lines", max_step=2.0))
    assert path.edge_lengths().max() <= 2.0 * (1.0 + 1e-9)
    path = economised(RING, None, 0.5, Writing("lines", max_turn=np.radians(5.0)))
    edges = np.diff(np.vstack([path.path(), path.points[1:2]]), axis=0)
    heading = np.unwrap(np.arctan2(edges[:, 1], edges[:, 0]))
    assert np.degrees(np.abs(np.diff(heading))).max() <= 5.0 * (1.0 + 1e-6)


def test_a_circle_is_one_arc_and_its_least_number_is_one():
    writing = Writing("arcs")
    chain = economised(RING, (CENTRE, RADIUS), 0.1, writing)
    counts = counts_of(chain, circle=True)
    assert (counts.entities, counts.arcs, counts.vertices) == (1, 1, 0)
    assert least_of(RING, (CENTRE, RADIUS), 0.1, writing) == 1.0


def test_least_numbers_of_a_circle_are_those_of_the_sagitta():
    """Chords on a circle: n = pi / acos(1 - e / R); asymptotically the formula counts 2 pi R sqrt(1 / (8 R e))."""
    error = 1e-4
    exact = np.pi / np.arccos(1.0 - error / RADIUS)
    assert least_of(RING, None, error, Writing("lines", on_curve=True)) == pytest.approx(exact, rel=1e-4)
    assert least_of(RING, None, error, Writing("lines")) == pytest.approx(exact / np.sqrt(2.0), rel=1e-4)
    assert least_of(RING, None, error, Writing("lines", max_step=1.0)) is None


def test_the_yardstick_of_splines_is_near_what_is_written():
    found = search(rounded_outline()).best(0.1, Writing("spline"))
    least = least_of(found.faired.spline, None, found.chord_error, Writing("spline"))
    assert 0.5 < counts_of(found.curve).entities / least < 2.0


def test_counts_are_what_the_controller_sees():
    chain = ArcChain(np.array([[0.0, 0.0], [4.0, 0.0], [4.0, 2.0]]), np.array([0.0, 1.0]))
    counts = counts_of(chain)
    assert (counts.entities, counts.pieces, counts.arcs, counts.lines, counts.vertices) == (2, 2, 1, 1, 3)
    path = Polyline(np.array([[0.0, 0.0], [1.0, 0.0], [1.0, 1.0]]))
    assert (counts_of(path).entities, counts_of(path).lines) == (3, 2)
    line = Spline(np.array([0.0, 0.0, 1.0, 1.0]), np.array([[0.0, 0.0], [1.0, 0.0]]), 1)
    assert (counts_of(line).entities, counts_of(line).pieces) == (2, 1)


def test_rounding_moves_points_by_half_a_unit_at_most_and_keeps_what_is_closed():
    curve = economised(RING, None, 0.01, Writing("spline"))
    out = rounded(curve, False, 2)
    assert np.array_equal(out.control, np.round(curve.control, 2))
    assert np.array_equal(out.control[0], out.control[-1])
    bound = Writing("spline", decimals=2).rounding
    assert hausdorff(curve, out, 1e-5).measured <= bound
    ring = rounded(full_circle(CENTRE + 0.00417, RADIUS + 0.0033), True, 2)
    assert np.allclose(np.linalg.norm(ring.points[1] - ring.points[0]), 2.0 * RADIUS, atol=1e-12)
    assert np.allclose(ring.points.mean(axis=0), CENTRE, atol=1e-12)
    path = rounded(Polyline(np.array([[0.0, 0.0], [0.004, 0.0], [1.0, 0.0], [1.0, 1.0]]), True), False, 2)
    assert len(path.points) == 3  # two vertices fell on one another
    assert rounded(curve, False, None) is curve


def test_radii_beyond_the_limits_are_named_the_worst_first():
    chain = ArcChain(
        np.array([[0.0, 0.0], [2.0, 0.0], [2.0, 6.0], [40.0, 6.0]]), np.array([1.0, 1.0, np.tan(np.arcsin(0.19) / 2.0)])
    )
    found = beyond_radii(chain, Writing("arcs", least_radius=2.0, most_radius=50.0))
    assert [radius for radius, _ in found] == pytest.approx([1.0, 100.0])
    assert np.allclose(found[0][1], [1.0, 0.0])
    assert beyond_radii(chain, Writing("arcs")) == []


@pytest.mark.parametrize(("form", "finer_by"), [("spline", 0.5), ("arcs", 0.7), ("lines", 0.7)])
def test_a_budget_is_kept_with_the_smallest_chord_error(form, finer_by):
    writing = Writing(form)
    looking = search(rounded_outline())
    usual = looking.best(0.1, writing)
    budget = usual.entities + 6
    inside, reached = looking.within_budget(budget, writing)
    assert reached
    assert inside.entities == counts_of(inside.curve).entities <= budget
    assert inside.kept
    assert inside.chord_error <= 0.1 * (1.0 + 1e-9)  # more entities than a tenth of the tolerance takes
    finer = looking._feasible(finer_by * inside.chord_error, writing)
    assert counts_of(finer.curve).entities > budget


def test_a_budget_out_of_reach_gives_the_fewest_entities():
    looking, writing = search(rounded_outline()), Writing("arcs")
    fewest, reached = looking.within_budget(4, writing)
    assert not reached
    assert fewest.kept
    usual = looking.best(0.1, writing)
    assert 4 < fewest.entities < usual.entities
    assert fewest.chord_error > usual.chord_error


def test_rounding_and_slack_are_held_against_the_tolerance():
    result = search(slack=0.2).best(0.1, Writing("arcs", decimals=1))
    assert result.within
    assert result.deviation.certified + 0.2 + rounding_of(result.curve, 1) <= 1.0


@pytest.mark.parametrize("seed", range(10))
def test_rounding_moves_no_point_farther_than_its_bound(seed):
    """Arcs up to three quarters of a circle, whose tops move farther than their ends do."""
    rng = np.random.default_rng(seed)
    points, bulges = rng.uniform(-9.0, 9.0, (12, 2)), rng.uniform(-2.4, 2.4, 12)
    chain, ring = ArcChain(points, bulges, True), full_circle(points[0], 5.0 + rng.uniform())
    for curve, circle in ((chain, False), (ring, True), (Polyline(points, True), False)):
        out = rounded(curve, circle, 0)
        moved = hausdorff(curve, out, 1e-3).measured
        assert moved <= rounding_of(curve, 0)


def test_the_top_of_a_half_circle_moves_farther_than_its_ends():
    """Ends that move by 0.57 make the radius grow from 4.6 to 5 and lift the centre by 0.4: the top rises by 0.8."""
    half = ArcChain(np.array([[0.4, -0.4], [9.6, -0.4]]), np.array([-1.0]))
    assert hausdorff(half, rounded(half, False, 0), 1e-4).measured == pytest.approx(0.8, abs=1e-3)
    assert 0.8 < rounding_of(half, 0) < 1.3


def test_arcs_between_vertices_that_become_one_are_left_out():
    chain = ArcChain(np.array([[0.0, 0.0], [5.0, 0.0], [5.02, 0.01], [5.0, 5.0]]), np.array([0.0, 0.3, 0.2]))
    out = rounded(chain, False, 1)
    assert np.array_equal(out.points, [[0.0, 0.0], [5.0, 0.0], [5.0, 5.0]])
    assert np.array_equal(out.bulges, [0.0, 0.2])


def test_turns_that_rounding_sharpens_are_counted():
    angle = 2.0 * np.pi * np.arange(90) / 90  # turns of 4 degrees
    path = Polyline(10.0 * np.stack([np.cos(angle), np.sin(angle)], axis=1), True)
    limit = np.radians(4.01)
    assert sharper_turns(path, rounded(path, False, 9), limit) == 0
    assert sharper_turns(path, rounded(path, False, 1), limit) > 10
    assert sharper_turns(path, rounded(path, False, 1), None) == 0
    assert sharper_turns(path, path, np.radians(1.0)) == 0  # rounding is not to blame for what was sharp before
