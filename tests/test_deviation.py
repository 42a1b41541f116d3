"""Certified deviation against dense sampling and against cases worked out by hand."""

from itertools import pairwise

import numpy as np
import pytest

from geometry.arcs import ArcChain, full_circle
from geometry.arrays import FloatArray
from geometry.bspline import Spline
from geometry.curve import Curve
from geometry.deviation import Deviation, TwoSided, directed_hausdorff, exceeding, hausdorff, within
from geometry.errors import GeometryError, NotFiniteError, TooFewPointsError
from geometry.polyline import Polyline


def polyline(*points: tuple[float, ...], closed: bool = False) -> Polyline:
    return Polyline(np.array(points, dtype=np.float64), closed)


def random_curve(rng: np.random.Generator, dimension: int, origin: float) -> Curve:
    """Any kind of curve: polyline, spline of degree 1 to 3, arc chain; open or closed."""
    kind, closed = int(rng.integers(0, 5)), bool(rng.random() < 0.5)
    count = int(rng.integers(4 if kind in (1, 2, 3) else 2, 9))
    points = origin + rng.uniform(-10.0, 10.0, (max(count, 3 if closed else 2), dimension))
    if kind == 0 or (kind == 4 and dimension == 3):
        return Polyline(points, closed)
    if kind == 4:
        bulges = rng.normal(0.0, 1.0, len(points) - (not closed)) * (rng.random(len(points) - (not closed)) < 0.7)
        return ArcChain(points, bulges, closed)
    control = np.vstack([points, points[:1]]) if closed else points
    inner = np.sort(rng.uniform(0.0, 1.0, len(control) - kind - 1))
    return Spline(np.concatenate([[0.0] * (kind + 1), inner, [1.0] * (kind + 1)]), control, kind, closed)


def dense(curve: Curve, count: int) -> tuple[FloatArray, float]:
    """Own sampling, from each kind's definition: points on the curve, and how far chords between them leave it."""
    bow = 0.0
    if isinstance(curve, Spline):
        x = np.arange(count // len(curve.spans)) / (count // len(curve.spans))
        wide = np.diff(curve.breaks)
        points = curve.evaluate(np.append(curve.breaks[:-1, None] + wide[:, None] * x, curve.knots[-1]))
        second = np.linalg.norm(np.diff(curve.beziers, n=2, axis=1), axis=2).max(initial=0.0)
        bow = curve.degree * (curve.degree - 1) * float(second) * x[1] ** 2 / 8.0
    elif isinstance(curve, ArcChain):
        chains = []
        centre, radius = curve.circles()
        path = curve.path()
        for i, sweep in enumerate(curve.sweeps()):
            x = np.linspace(0.0, 1.0, count // len(curve.bulges) + 2)
            if curve.bulges[i] == 0.0:
                chains.append(path[i] + x[:, None] * (path[i + 1] - path[i]))
            else:
                away = path[i] - centre[i]
                angle = np.arctan2(away[1], away[0]) + x * sweep
                chains.append(centre[i] + radius[i] * np.stack([np.cos(angle), np.sin(angle)], axis=1))
                bow = max(bow, float(radius[i] * (1.0 - np.cos(0.5 * sweep * x[1]))))
        points = np.concatenate(chains)
    else:
        assert isinstance(curve, Polyline)
        x = np.linspace(0.0, 1.0, count // len(curve.points) + 2)[:, None]
        path = curve.path()
        points = np.concatenate([(1.0 - x) * p + x * q for p, q in pairwise(path)])
    return points, bow


def distances(points: FloatArray, path: FloatArray) -> FloatArray:
    """Distance from points to a path, every segment compared."""
    start, along = path[:-1], np.diff(path, axis=0)
    square = np.maximum((along * along).sum(axis=1), 1e-300)
    best = []
    for block in np.array_split(points, 1 + len(points) * len(start) // 500_000):
        offset = block[:, None] - start
        t = np.clip((offset * along).sum(axis=2) / square, 0.0, 1.0)
        best.append(np.linalg.norm(offset - t[:, :, None] * along, axis=2).min(axis=1))
    return np.concatenate(best)


@pytest.mark.parametrize("seed", range(60))
def test_bounds_enclose_dense_samples_of_curves_of_every_kind(seed: int) -> None:
    rng = np.random.default_rng(seed)
    dimension, origin = (2, 3)[seed % 2], (0.0, 0.0, 5e6)[seed % 3]
    a, b = random_curve(rng, dimension, origin), random_curve(rng, dimension, origin)
    width = 10.0 ** rng.uniform(-5.0, -1.0)
    found = hausdorff(a, b, width)
    shift = np.full(dimension, -origin)  # the oracle works near the origin, with coordinates that shift exactly enough
    points = [dense(curve.moved(shift), 1_000) for curve in (a, b)]  # type: ignore[attr-defined]
    slip = 1e-8 if origin else 1e-12
    for (p, bow), (q, gap), result in zip(points, points[::-1], (found.forward, found.backward), strict=True):
        far = distances(p, q).max()
        step = 0.5 * np.linalg.norm(np.diff(p, axis=0), axis=1).max() + bow
        assert result.certified >= far - gap - slip
        assert result.measured <= far + step + gap + slip
        assert 0.0 <= result.certified - result.measured <= width
    assert found.certified == max(found.forward.certified, found.backward.certified)
    assert found.measured == max(found.forward.measured, found.backward.measured)


@pytest.mark.parametrize("seed", range(12))
def test_polyline_bounds_close_to_rounding(seed: int) -> None:
    rng = np.random.default_rng(100 + seed)
    dimension = 2 + seed % 2
    a, b = (Polyline(np.cumsum(rng.normal(0.0, 1.0, (150, dimension)), axis=0), seed % 4 < 2) for _ in range(2))
    found = hausdorff(a, b, 1e-10)
    assert found.certified - found.measured <= 1e-10
    points, _ = dense(a, 20_000)
    far, step = distances(points, b.path()).max(), np.linalg.norm(np.diff(points, axis=0), axis=1).max()
    assert far - 1e-12 <= found.forward.certified <= far + 0.5 * step + 1e-12


def test_a_semicircle_and_its_diameter_are_a_radius_apart() -> None:
    arc = ArcChain(np.array([[100.0, 0.0], [-100.0, 0.0]]), np.array([1.0]))
    found = hausdorff(arc, polyline((-100.0, 0.0), (100.0, 0.0)), 1e-6)
    for one in (found.forward, found.backward):
        assert one.measured <= 100.0 <= one.certified <= one.measured + 1e-6
    assert found.forward.place is not None
    np.testing.assert_allclose(found.forward.place.point, [0.0, 100.0], atol=1e-2)
    assert found.forward.place.t == pytest.approx(0.5, abs=1e-4)


def test_ties_all_along_are_settled() -> None:
    rings = [full_circle(np.array([3.0, 4.0]), radius) for radius in (10.0, 10.5)]
    found = hausdorff(rings[0], rings[1], 1e-6)
    assert found.measured <= 0.5 <= found.certified <= found.measured + 1e-6
    lines = [polyline((0.0, 0.0), (50.0, 0.0)), polyline((0.0, 1.0), (20.0, 1.0), (50.0, 1.0))]
    found = hausdorff(*lines, 1e-9)
    assert found.measured <= 1.0 <= found.certified <= found.measured + 1e-9


def test_straight_pieces_beside_bent_ones_are_settled_too() -> None:
    # the rung is the farthest, and exact from the start; the half circle, farther from exact, is nearer
    legs = polyline((0.0, 0.0), (0.0, 100.0), (10.0, 100.0), (10.0, 0.0))
    bent = ArcChain(np.array([[0.0, 37.0], [10.0, 37.0], [10.0, 45.0]]), np.array([0.0, 1.0]))
    found = directed_hausdorff(bent, legs, 1e-8)
    assert found.measured <= 5.0 <= found.certified <= found.measured + 1e-8
    assert within(polyline((0.0, 37.0), (10.0, 37.0)), legs, 5.001).forward.certified <= 5.001
    for tolerance in (4.9999, 5.0001):
        assert len(exceeding(bent, legs, tolerance, 1e-6)) == (tolerance < 5.0)


@pytest.mark.parametrize("seed", [326, 627, 1000, 1054])
def test_widths_are_kept_and_decisions_reached_where_chords_differ_in_error(seed: int) -> None:
    rng = np.random.default_rng(10_000 + seed)
    dimension, origin = (2, 3)[seed % 2], (0.0, 0.0, 5e6)[seed % 3]
    a, b = random_curve(rng, dimension, origin), random_curve(rng, dimension, origin)
    width = 10.0 ** rng.uniform(-6.0, -1.0)
    found = hausdorff(a, b, width)
    assert all(one.certified - one.measured <= width for one in (found.forward, found.backward))
    assert within(a, b, found.certified + 1e-3).inside is True
    assert within(a, b, found.measured - 1e-3).inside is False


def test_a_line_between_two_parallel_ones_is_measured_halfway() -> None:
    # the middle of the rung is 5 from both legs, and nothing of it but its middle
    legs = polyline((0.0, 0.0), (0.0, 100.0), (10.0, 100.0), (10.0, 0.0))
    rung = polyline((0.0, 37.0), (10.0, 37.0))
    found = directed_hausdorff(rung, legs, 1e-10)
    assert found.measured <= 5.0 <= found.certified <= found.measured + 1e-10


def test_a_point_at_the_centre_of_a_large_ring_is_settled() -> None:
    angle = np.linspace(0.0, 2.0 * np.pi, 3_000, endpoint=False)
    ring = Polyline(50.0 * np.stack([np.cos(angle), np.sin(angle)], axis=1), True)
    found = directed_hausdorff(polyline((-0.1, 0.0), (0.1, 0.0)), ring, 1e-6)
    apothem = 50.0 * np.cos(np.pi / 3_000)
    assert apothem - 1e-9 <= found.certified <= 50.0
    assert found.certified - found.measured <= 1e-6


@pytest.mark.parametrize("origin", [0.0, 5e6])
def test_equal_curves_are_no_width_apart(origin: float) -> None:
    rng = np.random.default_rng(3)
    for curve in (random_curve(rng, 2, origin) for _ in range(8)):
        found = hausdorff(curve, curve, 1e-4)
        assert found.measured == 0.0
        assert found.certified <= 1e-4


def test_repeated_vertices_and_single_points_are_measured() -> None:
    a = polyline((0.0, 0.0), (0.0, 0.0), (10.0, 0.0), (10.0, 0.0))
    b = polyline((0.0, 2.0), (10.0, 3.0), (10.0, 3.0))
    assert hausdorff(a, b, 1e-9).certified == pytest.approx(3.0, abs=1e-9)
    point = polyline((3.0, 4.0))
    found = hausdorff(point, polyline((0.0, 0.0), (6.0, 0.0)), 1e-9)
    assert found.forward.measured == pytest.approx(4.0, abs=1e-9)
    assert found.backward.measured == pytest.approx(5.0, abs=1e-9)
    assert hausdorff(point, Polyline(np.zeros((1, 2)), True), 1e-9).certified == pytest.approx(5.0, abs=1e-9)


def test_a_spline_with_a_corner_is_measured_like_its_pieces() -> None:
    # two straight cubics joined at a corner: an L; the square's other corner is 10 away from neither of its legs
    control = np.array([[0.0, 0.0], [3.0, 0.0], [7.0, 0.0], [10.0, 0.0], [10.0, 3.0], [10.0, 7.0], [10.0, 10.0]])
    corner = Spline(np.array([0.0] * 4 + [1.0] * 3 + [2.0] * 4), control, 3)
    same = polyline((0.0, 0.0), (10.0, 0.0), (10.0, 10.0))
    assert hausdorff(corner, same, 1e-9).certified <= 1e-9
    far = hausdorff(corner, polyline((0.0, 0.0), (10.0, 10.0)), 1e-6)
    assert far.forward.measured <= np.sqrt(50.0) <= far.forward.certified


def test_decisions_agree_with_the_truth_on_either_side() -> None:
    rings = [full_circle(np.zeros(2), radius) for radius in (10.0, 10.5)]
    assert within(*rings, 0.5001).inside is True
    assert within(*rings, 0.4999).inside is False
    rng = np.random.default_rng(11)
    for seed in range(20):
        a, b = random_curve(rng, 2 + seed % 2, 0.0), random_curve(rng, 2 + seed % 2, 0.0)
        truth = hausdorff(a, b, 1e-5)
        yes, no = within(a, b, truth.certified + 1e-3), within(a, b, truth.measured - 1e-3)
        assert yes.inside is True
        assert yes.backward is not None
        assert max(yes.forward.certified, yes.backward.certified) <= truth.certified + 1e-3
        assert no.inside is False
        # the bounds of a decision hold like all others
        for one, other in ((no.forward, truth.forward), (no.backward, truth.backward)):
            assert one is None or one.measured <= other.certified <= max(one.certified, other.certified)
        assert no.forward.certified >= truth.forward.measured


def test_a_tolerance_met_to_the_last_digit_is_not_called_either_way_wrongly() -> None:
    a, b = polyline((0.0, 0.0), (10.0, 0.0)), polyline((0.0, 1.0), (10.0, 1.0))
    answer = within(a, b, 1.0)
    assert answer.inside is None
    assert answer.forward.measured <= 1.0 <= answer.forward.certified
    assert within(a, b, 1.0 + 1e-12).inside is True
    assert within(a, b, 1.0 - 1e-12).inside is False


def test_an_answer_of_no_comes_from_either_direction() -> None:
    short, long = polyline((0.0, 0.0), (10.0, 0.0)), polyline((0.0, 0.0), (30.0, 0.0))
    forward_only, backward_only = within(long, short, 1.0), within(short, long, 1.0)
    assert forward_only.inside is False
    assert forward_only.backward is None
    assert backward_only.inside is False
    assert backward_only.backward is not None
    assert backward_only.backward.measured > 1.0


def test_what_exceeds_a_limit_is_found_where_it_is() -> None:
    x = np.linspace(0.0, 100.0, 101)
    bumps = np.where(np.abs(x - 20.0) < 0.5, 3.0, 0.0) + np.where(np.abs(x - 70.0) < 1.5, 2.0, 0.0)
    bumped, base = Polyline(np.stack([x, bumps], axis=1)), polyline((0.0, 0.0), (100.0, 0.0))
    out = exceeding(bumped, base, 1.0)
    assert out.element.tolist() == [19, 20, 68, 69, 70, 71]
    np.testing.assert_allclose(out.distance, [3.0, 3.0, 2.0, 2.0, 2.0, 2.0], atol=1e-9)
    assert (out.bound >= out.distance).all()
    np.testing.assert_allclose(out.points[:2], [[20.0, 3.0], [20.0, 3.0]], atol=1e-12)
    assert out.t[:2].tolist() == [1.0, 0.0]
    assert len(exceeding(bumped, base, 3.0 + 1e-9)) == 0


def test_what_exceeds_a_limit_inside_an_edge_is_found() -> None:
    legs = polyline((0.0, 0.0), (0.0, 100.0), (10.0, 100.0), (10.0, 0.0))
    out = exceeding(polyline((0.0, 20.0), (10.0, 20.0), (10.0, 30.0)), legs, 4.9)
    assert out.element.tolist() == [0]
    np.testing.assert_allclose(out.points, [[5.0, 20.0]], atol=1e-9)
    assert out.t == pytest.approx([0.5])


@pytest.mark.parametrize("seed", range(15))
def test_whatever_is_sampled_out_of_a_limit_is_among_the_exceeding(seed: int) -> None:
    rng = np.random.default_rng(40 + seed)
    a, b = random_curve(rng, 2, 0.0), random_curve(rng, 2, 0.0)
    limit = 0.7 * hausdorff(a, b, 1e-3).forward.certified
    out = exceeding(a, b, limit)
    assert len(out) > 0
    assert (out.distance <= out.bound).all()
    if isinstance(a, Spline):
        u = np.linspace(a.knots[0], a.knots[-1], 2_000)[:-1]
        element, _ = a.locate(u)
        far = distances(a.evaluate(u), b.flatten(1e-5).path()) > limit + 1e-4
        assert set(element[far]) <= set(out.element)
    points = (
        a.evaluate(a.breaks[out.element] + out.t * np.diff(a.breaks)[out.element]) if isinstance(a, Spline) else None
    )
    if points is not None:  # on the curve but for the chord error
        assert np.linalg.norm(points - out.points, axis=1).max() <= limit / 20.0
    assert len(exceeding(a, b, hausdorff(a, b, 1e-3).forward.certified + 1e-3, 1e-5)) == 0


def test_turning_and_reversing_change_nothing() -> None:
    rng = np.random.default_rng(5)
    a, b = Polyline(rng.uniform(0.0, 10.0, (30, 2)), True), Polyline(rng.uniform(0.0, 10.0, (20, 2)))
    found = hausdorff(a, b, 1e-10)
    turn = np.array([[0.6, -0.8], [0.8, 0.6]])
    turned = hausdorff(Polyline(a.points @ turn, True), Polyline(b.points @ turn).reversed(), 1e-10)
    assert turned.certified == pytest.approx(found.certified, abs=1e-10)
    swapped = hausdorff(b, a, 1e-10)
    assert swapped.forward.certified == pytest.approx(found.backward.certified, abs=1e-10)


def test_unusable_input_is_refused() -> None:
    good = polyline((0.0, 0.0), (1.0, 0.0))
    with pytest.raises(NotFiniteError, match="point 1"):
        hausdorff(good, polyline((0.0, 0.0), (np.nan, 0.0)), 1e-3)
    with pytest.raises(TooFewPointsError):
        hausdorff(good, Polyline(np.zeros((0, 2))), 1e-3)
    with pytest.raises(GeometryError, match="2 and 3 dimensions"):
        hausdorff(good, polyline((0.0, 0.0, 0.0), (1.0, 0.0, 0.0)), 1e-3)
    for width in (0.0, -1.0, np.nan, np.inf):
        with pytest.raises(GeometryError, match="width"):
            directed_hausdorff(good, good, width)
    with pytest.raises(GeometryError, match="tolerance"):
        within(good, good, 0.0)


def test_a_two_sided_result_reports_the_larger_of_both() -> None:
    two = TwoSided(Deviation(1.0, 1.5), Deviation(2.0, 2.25))
    assert (two.measured, two.certified) == (2.0, 2.25)
