"""Pieces drawn as lines and arcs: chains fitted to points, stretches merged, joints eased, slots recognised."""

import numpy as np
import pytest

from geometry.arcs import ArcChain
from geometry.corners import find_corners
from geometry.deviation import hausdorff
from geometry.economy.arcs import fewest_arcs
from geometry.fairing import fair_outline
from geometry.fairing.arcs import _is_staircase
from geometry.fairing.easing import eased
from geometry.fairing.fair import _attempt, _spline
from geometry.fairing.merging import merged_stretches
from geometry.fairing.tangent_chain import Ends, TangentChain, fit_chain
from geometry.fairing.trace import Trace
from geometry.fairness import fairness
from geometry.polyline import Polyline
from tests.tracing import noisy, staircase, turned


def rounded(width, height, radius):
    """Closed chain of a rectangle with rounded corners, anticlockwise."""
    w, h, b = 0.5 * width, 0.5 * height, np.tan(np.pi / 8.0)
    points = [
        *((-w + radius, -h), (w - radius, -h), (w, -h + radius), (w, h - radius)),
        *((w - radius, h), (-w + radius, h), (-w, h - radius), (-w, -h + radius)),
    ]
    return ArcChain(np.array(points, dtype=float), np.array([0.0, b] * 4), True)


def slot(length, radius):
    """Closed chain of a slot with round ends, anticlockwise."""
    half = 0.5 * length
    points = np.array([[-half, -radius], [half, -radius], [half, radius], [-half, radius]])
    return ArcChain(points, np.array([0.0, 1.0, 0.0, 1.0]), True)


def traced(chain, degrees, kind):
    outline = turned(chain.flatten(1e-4).points, degrees) + np.array([0.3, 0.6])
    if kind == "raster":
        return Polyline(staircase(outline), True), 1.0
    return Polyline(noisy(outline, 2.0, 0.15, 4), True), 0.7


def chain_points(chain, per=40):
    """Points at even steps of every segment, and which segment each belongs to."""
    joints, headings = chain.joints()
    points, owner = [], []
    for k in range(len(chain)):
        s = (np.arange(per) + 0.5) / per * chain.lengths[k]
        bend = chain.curvatures[k]
        step = s.astype(complex) if bend == 0.0 else (np.exp(1j * bend * s) - 1.0) / (1j * bend)
        points.append(joints[k] + np.exp(1j * headings[k]) * step)
        owner.append(np.full(per, k))
    return np.concatenate(points), np.concatenate(owner)


SHAPE = TangentChain(
    1.0 + 2.0j,
    0.3,
    np.array([20.0, 15.0, 12.0, 25.0]),
    np.array([0.0, 0.1, 0.0, -0.05]),
    np.array([True, False, True, False]),
)


def both_ends():
    return Ends((complex(SHAPE.joints()[0][0]), complex(SHAPE.joints()[0][-1])))


def test_a_chain_is_found_again_from_exact_points():
    points, owner = chain_points(SHAPE)
    start = TangentChain(
        0.6 + 2.2j, 0.33, SHAPE.lengths * np.array([1.1, 0.85, 1.15, 0.95]), SHAPE.curvatures * 1.1, SHAPE.line
    )
    fitted = fit_chain(start, owner, points, both_ends(), 1e-12, 40, near=False)
    assert fitted is not None
    assert np.abs(fitted.offsets).max() < 1e-4
    assert fitted.chain.lengths == pytest.approx(SHAPE.lengths, abs=0.02)
    assert fitted.chain.curvatures == pytest.approx(SHAPE.curvatures, abs=1e-4)
    assert np.array_equal(fitted.segment, owner)


def test_standard_errors_of_curvature_are_those_of_repeated_noise():
    points, owner = chain_points(SHAPE)
    rng = np.random.default_rng(5)
    found, told = [], []
    for _ in range(100):
        noise = 0.1 * (rng.normal(size=len(points)) + 1j * rng.normal(size=len(points)))
        fitted = fit_chain(SHAPE, owner, points + noise, both_ends(), 1e-4, 20, near=True)
        found.append(fitted.chain.curvatures)
        told.append(0.1 * fitted.spread)
    spread = np.std(found, axis=0)[[1, 3]]
    assert np.median(told, axis=0)[[1, 3]] == pytest.approx(spread, rel=0.3)
    assert np.isinf(told[0][[0, 2]]).all()


def test_pins_and_closing_are_kept():
    points, owner = chain_points(SHAPE)
    ends = Ends((complex(points[0]) + 0.2j, complex(points[-1]) - 0.1))
    fitted = fit_chain(SHAPE, owner, points, ends, 1e-6, 20, near=False)
    joints, _ = fitted.chain.joints()
    assert abs(joints[0] - ends.pins[0]) < 0.01
    assert abs(joints[-1] - ends.pins[1]) < 0.01


def test_stretches_of_one_circle_are_merged_and_pieces_kept_apart():
    points, _ = chain_points(SHAPE, 60)
    noise = np.random.default_rng(1).normal(size=(2, len(points))) * 0.05
    points = points + noise[0] + 1j * noise[1]
    both = np.concatenate([points, points[::-1]])
    piece = np.repeat([0, 1], len(points))
    starts = merged_stretches(both, piece, np.full(2, 1.0 / 0.05**2))
    assert len(points) in starts
    for first in (0, len(points)):
        own = starts[(starts >= first) & (starts < first + len(points))] - first
        assert 4 <= len(own) <= 6
        for joint in (60, 120, 180):  # a joint is a tangent one: it can be told to a few points only
            assert np.abs(own - joint).min() <= 12


def test_an_eased_chain_keeps_its_ends_and_lies_beside_the_sharp_one():
    points, owner = chain_points(SHAPE)
    ends = Ends((complex(SHAPE.joints()[0][0]), complex(SHAPE.joints()[0][-1])))
    fitted = fit_chain(SHAPE, owner, points, ends, 1e-9, 20, near=True)
    curve, feet = eased(fitted, points, ends, 1e-9, 1.0)
    assert abs(curve.points[0] - ends.pins[0]) < 1e-9
    assert abs(curve.points[-1] - ends.pins[1]) < 1e-9
    on = curve.at(feet)
    assert np.abs(on[:, 0] + 1j * on[:, 1] - points).max() < 0.15
    step = np.diff(curve.points)
    bend = np.diff(np.unwrap(np.angle(step))) / np.abs(step[1:])
    assert np.abs(np.diff(bend)).max() < 0.01  # no jump of curvature is left


DEGREES = (0.0, 11.0, 17.0, 25.0, 40.0, 62.0)


def shaped(true, kind, extrema, segments, radius):
    """Trace a shape at several headings; return how many came back with its own extrema, segments and radius."""
    found = 0
    for degrees in DEGREES:
        outline, tolerance = traced(true, degrees, kind)
        faired = fair_outline(outline, find_corners(outline, tolerance), tolerance)
        place = Polyline(turned(true.flatten(1e-3).points, degrees) + np.array([0.3, 0.6]), True)
        assert hausdorff(place, faired.spline, 0.01).certified < 0.75 * tolerance
        after = fairness(faired.spline, tolerance)
        chain = fewest_arcs(faired.spline, 0.1 * tolerance)
        bent = chain.curvatures()[chain.bulges != 0.0]
        found += bool(
            after.inflections == 0
            and after.curvature_extrema == extrema
            and len(chain.bulges) == segments
            and np.abs(1.0 / bent - radius).max() < 0.08 * radius
        )
    return found


@pytest.mark.parametrize("kind", ["raster", "points"])
def test_a_slot_comes_back_as_two_lines_and_two_arcs(kind):
    assert shaped(slot(95.0, 21.0), kind, 4, 4, 21.0) >= 4


@pytest.mark.parametrize("kind", ["raster", "points"])
def test_a_rounded_rectangle_comes_back_as_four_lines_and_four_arcs(kind):
    assert shaped(rounded(130.0, 110.0, 15.0), kind, 8, 8, 15.0) >= 4


@pytest.mark.parametrize(("kind", "radius"), [("clean", 6.0), ("points", 10.0), ("raster", 10.0)])
def test_small_fillets_keep_their_radius_wherever_the_outline_begins(kind, radius):
    true = rounded(100.0, 60.0, radius)
    found = 0
    for turn, degrees in enumerate((8.0, 20.0, 33.0)):
        if kind == "clean":
            shape = turned(true.flatten(1e-4).points, degrees)
            outline, tolerance = Polyline(noisy(shape, 0.5, 0.002, turn), True), 1.0
        else:
            outline, tolerance = traced(true, degrees, kind)
        for share in (0.0, 0.3, 0.7):
            rolled = Polyline(np.roll(outline.points, int(share * len(outline.points)), axis=0), True)
            faired = fair_outline(rolled, find_corners(rolled, tolerance), tolerance)
            after = fairness(faired.spline, tolerance)
            found += after.curvature_extrema == 8 and abs(after.least_radius / radius - 1.0) < 0.12
    assert found >= 6


def test_chains_are_held_against_the_trace_and_not_against_themselves():
    outline, tolerance = traced(slot(95.0, 21.0), 17.0, "raster")
    scaled = outline.points / tolerance
    trace = Trace(np.vstack([scaled, scaled[:1]]), True)
    fit, nodes, check = _attempt(trace, np.zeros(0), np.zeros((0, 2)), 3)
    assert fit.sampled.aims is not None
    assert not np.array_equal(fit.sampled.aims, fit.sampled.points)
    far = hausdorff(_spline(fit, nodes), Polyline(scaled, True), 0.01)
    assert check.worst == pytest.approx(far.measured, abs=0.1)


def test_a_dense_smooth_outline_is_no_staircase():
    angle = 2.0 * np.pi * np.arange(400) / 400
    smooth = np.stack([80.0 * np.cos(angle), 45.0 * np.sin(angle)], axis=1)
    assert not _is_staircase(Trace(np.vstack([smooth, smooth[:1]]), True))
    steps = staircase(smooth)
    for degrees in (0.0, 30.0):
        path = turned(np.vstack([steps, steps[:1]]), degrees)
        assert _is_staircase(Trace(path, True))


def test_a_side_with_a_rounded_end_between_corners():
    """Half of a slot, cut off square: two corners and one smooth piece of line, arc, line."""
    points = np.array([[-60.0, -15.0], [30.0, -15.0], [30.0, 15.0], [-60.0, 15.0]])
    true = ArcChain(points, np.array([0.0, 1.0, 0.0, 0.0]), True)
    outline, tolerance = traced(true, 25.0, "raster")
    faired = fair_outline(outline, find_corners(outline, tolerance), tolerance)
    assert len(faired.corners) == 2
    after = fairness(faired.spline, tolerance)
    assert after.inflections == 0
    assert after.curvature_extrema <= 2
    assert after.least_radius == pytest.approx(15.0, rel=0.06)


@pytest.mark.parametrize("kind", ["raster", "points", "clean"])
def test_an_ellipse_is_not_made_of_arcs(kind):
    angle = 2.0 * np.pi * np.arange(4000) / 4000
    outline = np.stack([80.0 * np.cos(angle), 45.0 * np.sin(angle)], axis=1)
    place = turned(outline, 17.0) + np.array([0.3, 0.6])
    made = {"raster": staircase(place), "points": noisy(place, 2.0, 0.15, 4), "clean": place[::8]}
    trace, tolerance = made[kind], 0.7 if kind == "points" else 1.0
    faired = fair_outline(Polyline(trace, True), find_corners(Polyline(trace, True), tolerance), tolerance)
    along = np.linspace(0.0, 1.0, 401)[:-1]
    knots = faired.spline.knots
    u = knots[0] + along * (knots[-1] - knots[0])
    d1, d2 = faired.spline.evaluate(u, 1), faired.spline.evaluate(u, 2)
    bend = (d1[:, 0] * d2[:, 1] - d1[:, 1] * d2[:, 0]) / np.hypot(d1[:, 0], d1[:, 1]) ** 3
    steady = np.abs(np.diff(bend)) < 1e-5  # a chain has long stretches of one curvature
    assert steady.mean() < 0.25
