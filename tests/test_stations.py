"""Stations: their order, the fairest curve within a tolerance, and what is said about a sprung curve."""

import numpy as np
import pytest

from geometry.errors import GeometryError, NotFiniteError
from geometry.interpolate import spline_through
from geometry.parameter import node_parameters
from geometry.stations import nearest_order, overshoots, sparse_spans, spring_within


def circle(n, radius=1.0):
    t = np.linspace(0.0, 2.0 * np.pi, n, endpoint=False)
    return radius * np.stack([np.cos(t), np.sin(t)], axis=1)


STEP = np.array([[0, 0], [1, 0], [2, 0], [3, 0], [3.2, 1], [4, 1], [5, 1], [6, 1]], dtype=float)


def checked(points, parameter="chord", ends="not-a-knot", degree=3, cure=True):
    """Faults of a curve through points, with the setting for another try."""

    def respring(other_parameter, other_ends, other_degree):
        kind = other_parameter or parameter
        chosen = ends if ends == "periodic" else other_ends or ends
        spline = spline_through(points, other_degree or degree, chosen, kind)
        return spline, node_parameters(points, kind, ends == "periodic")

    return overshoots(*respring(None, None, None), respring if cure else None)


# Order ----------------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("d", [2, 3])
@pytest.mark.parametrize("n", [60, 900])
def test_points_of_a_spiral_come_out_in_order(n, d):
    t = np.linspace(1.0, 9.0, n)
    points = np.stack([t * np.cos(t), t * np.sin(t), 0.2 * t], axis=1)[:, :d]
    shuffled = np.random.default_rng(n).permutation(n)
    order = shuffled[nearest_order(points[shuffled])]
    assert (np.abs(np.diff(order)) == 1).all()


def test_a_round_trip_begins_at_the_first_row():
    shuffled = np.random.default_rng(5).permutation(40)
    order = nearest_order(circle(40)[shuffled], closed=True)
    assert order[0] == 0
    assert order[1] < order[-1]
    steps = np.mod(np.diff(shuffled[order]), 40)
    assert set(steps.tolist()) in ({1}, {39})


def test_far_groups_and_repeated_points_are_joined():
    group = np.random.default_rng(1).random((30, 2))
    points = np.vstack([group, group + np.array([100.0, 0.0]), np.zeros((40, 2)), group + np.array([0.0, 300.0])])
    order = nearest_order(points)
    np.testing.assert_array_equal(np.sort(order), np.arange(len(points)))
    assert np.linalg.norm(np.diff(points[order], axis=0), axis=1).max() < 301.0
    assert (np.linalg.norm(np.diff(points[order], axis=0), axis=1) > 50.0).sum() == 2


def test_few_points_and_bad_ones():
    np.testing.assert_array_equal(nearest_order(np.array([[1.0, 2.0], [0.0, 0.0]])), [0, 1])
    np.testing.assert_array_equal(nearest_order(np.array([[0.0, 0.0], [9.0, 0.0], [1.0, 0.0]])), [0, 2, 1])
    with pytest.raises(NotFiniteError):
        nearest_order(np.array([[0.0, np.nan], [1.0, 1.0], [2.0, 2.0]]))


# Within a tolerance ---------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("degree", [1, 2, 3])
@pytest.mark.parametrize("closed", [False, True])
@pytest.mark.parametrize("d", [2, 3])
def test_every_station_is_met_within_the_tolerance(d, closed, degree):
    rng = np.random.default_rng(d + degree)
    p = np.hstack([circle(24, 30.0), np.zeros((24, 1))])[:, :d] + 0.05 * rng.normal(size=(24, d))
    u = node_parameters(p, closed=closed)
    for tolerance in (1e-6, 0.01, 0.2, 50.0):
        spline = spring_within(p, u, tolerance, closed, degree=degree)
        off = np.linalg.norm(spline.evaluate(u[:24]) - p, axis=1)
        assert off.max() <= tolerance * (1.0 + 1e-9)
        assert spline.closed == closed


def test_more_tolerance_gives_a_fairer_curve():
    rng = np.random.default_rng(3)
    x = np.linspace(0.0, 100.0, 40)
    p = np.stack([x, 10.0 * np.sin(0.05 * x) + 0.03 * rng.normal(size=40)], axis=1)
    u = node_parameters(p)

    def unfairness(tolerance):
        spline = spring_within(p, u, tolerance)
        middle = 0.5 * (spline.breaks[1:] + spline.breaks[:-1])
        return (np.diff(spline.breaks) * (spline.evaluate(middle, 3) ** 2).sum(axis=1)).sum()

    values = [unfairness(tolerance) for tolerance in (0.0, 0.01, 0.03, 0.1)]
    assert values[0] > 2.0 * values[1] > 8.0 * values[2] > 8.0 * values[3]


def test_a_circle_keeps_its_size_within_a_tolerance():
    p = circle(36, 50.0) + 0.1 * np.random.default_rng(2).normal(size=(36, 2))
    spline = spring_within(p, node_parameters(p, closed=True), 0.5, closed=True)
    assert spline.area() == pytest.approx(np.pi * 2500.0, rel=2e-3)
    assert spline.smooth_seam


def test_no_tolerance_is_interpolation():
    p = circle(9, 5.0)
    for ends in ("natural", "not-a-knot"):
        spline = spring_within(p, node_parameters(p), 0.0, ends=ends)
        np.testing.assert_array_equal(spline.control, spline_through(p, ends=ends).control)


def test_end_conditions_hold_within_a_tolerance():
    x = np.linspace(0.0, 9.0, 12)
    p = np.stack([x, np.sin(x) + 0.02 * np.cos(40.0 * x)], axis=1)
    u = node_parameters(p)
    natural = spring_within(p, u, 0.05, ends="natural")
    np.testing.assert_allclose(natural.evaluate(u[[0, -1]], 2), 0.0, atol=1e-9)
    start, end = np.array([0.6, 0.8]), np.array([1.0, 0.0])
    clamped = spring_within(p, u, 0.05, ends="clamped", start=start, end=end)
    np.testing.assert_allclose(clamped.evaluate(u[[0, -1]], 1), [start, end], atol=1e-9)


@pytest.mark.parametrize("closed", [False, True])
def test_corners_are_met_exactly_and_stay_sharp(closed):
    square = np.array([[0, 0], [2, -0.1], [4, 0], [4.1, 2], [4, 4], [2, 4.1], [0, 4], [-0.1, 2]], dtype=float)
    corners = [0, 2, 4, 6] if closed else [2, 4]
    u = node_parameters(square, closed=closed)
    spline = spring_within(square, u, 0.05, closed, corners)
    met = spline.breaks[spline.corner_breaks]
    assert len(met) == (3 if closed else 2)
    away = np.linalg.norm(spline.evaluate(met)[:, None] - square[corners], axis=2)
    np.testing.assert_allclose(away.min(axis=1), 0.0, atol=1e-12)
    off = np.linalg.norm(spline.evaluate(u[:-1] if closed else u) - square, axis=1)
    assert off.max() <= 0.05 * (1.0 + 1e-9)


def test_a_closed_curve_with_corners_begins_at_the_first_of_them():
    p = circle(12)
    u = node_parameters(p, closed=True)
    spline = spring_within(p, u, 0.01, closed=True, corners=[5])
    assert spline.closed
    assert not spline.smooth_seam
    np.testing.assert_allclose(spline.control[[0, -1]], p[[5, 5]], atol=1e-15)
    at = np.mod(u[:-1] - u[5], u[-1])
    assert np.linalg.norm(spline.evaluate(at) - p, axis=1).max() <= 0.01 * (1.0 + 1e-9)


def test_unusable_arguments_are_refused():
    p, u = circle(8), node_parameters(circle(8))
    with pytest.raises(GeometryError, match="must not be negative"):
        spring_within(p, u, -1.0)
    with pytest.raises(GeometryError, match="rows from 0 to 7"):
        spring_within(p, u, 0.1, corners=[8])
    with pytest.raises(GeometryError, match="degree of 4"):
        spring_within(p, u, 0.1, degree=4)
    with pytest.raises(GeometryError, match="leave them out"):
        spring_within(p, u, 0.1, corners=[3], start=np.ones(2))


# Between stations -----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("n", [5, 6, 8, 12, 40])
def test_circles_are_sound(n):
    assert checked(circle(n), ends="periodic") == []
    assert checked(circle(n)[: n // 2 + 2]) == []


@pytest.mark.parametrize("degree", [2, 3])
def test_smooth_tables_are_sound(degree):
    x = np.linspace(0.0, 12.0, 26)
    for y in (3.0 * np.sin(x), 0.1 * (x - 6.0) ** 3, np.sqrt(x), np.exp(-x), 0.0 * x):
        assert checked(np.stack([x, y], axis=1), degree=degree) == []


def test_a_step_overshoots_and_the_cure_cures():
    found = checked(STEP)
    worst = max(found, key=lambda fault: fault.size)
    assert (worst.kind, worst.from_row, worst.to_row) == ("overshoot", 2, 3)
    assert worst.where[1] == pytest.approx(-worst.size)  # below the straight part
    fine = spline_through(STEP).evaluate(np.linspace(0.0, node_parameters(STEP)[-1], 5001))
    assert worst.size == pytest.approx(-fine[:, 1].min(), rel=1e-2)
    assert worst.cure == "centripetal"
    assert not [fault for fault in checked(STEP, "centripetal", cure=False) if fault.from_row == 2]
    assert all(fault.cure is None for fault in checked(STEP, cure=False))


def test_uniform_parameters_loop_where_chords_differ():
    points = np.array([[0, 0], [10, 0], [10.2, 0.4], [10, 1], [0, 1.4]], dtype=float)
    found = checked(points, "uniform")
    assert {fault.cure for fault in found if fault.kind in ("loop", "overshoot")} & {"chord", "centripetal"}
    assert checked(points, "centripetal") == [] or checked(points, "chord") == []


def test_a_loop_is_told_from_an_overshoot():
    spline = spline_through(
        np.array([[0, 0], [10, 0], [20, 0]], dtype=float),
        ends="clamped",
        start=np.array([9.0, 9.0]),
        end=np.array([9.0, 9.0]),
    )
    assert {fault.kind for fault in overshoots(spline, node_parameters(np.array([[0, 0], [10, 0], [20, 0.0]])))} == {
        "overshoot"
    }
    loop = spline_through(
        np.array([[0, 0], [10, 0]], dtype=float),
        ends="clamped",
        start=np.array([9.0, 9.0]),
        end=np.array([9.0, -9.0]),
    )
    found = overshoots(loop, np.array([0.0, 10.0]))
    assert [fault.kind for fault in found] == ["loop"]
    assert found[0].size > 5.0


def test_corners_are_no_overshoot_and_degree_1_never_is():
    u = node_parameters(STEP)
    assert overshoots(spring_within(STEP, u, 0.0, corners=[3, 4]), u) == []
    assert checked(STEP, degree=1) == []


def test_stations_in_space_are_checked_too():
    t = np.linspace(0.0, 4.0, 20)
    helix = np.stack([np.cos(t), np.sin(t), 0.3 * t], axis=1)
    assert checked(helix) == []
    step = np.hstack([STEP, 0.1 * STEP[:, :1]])
    assert checked(step) != []


def test_sparse_spans_name_the_place_for_one_more_station():
    p = circle(5, 10.0)
    spans = sparse_spans(spline_through(p, ends="periodic"), node_parameters(p, closed=True))
    assert sorted(span.row for span in spans) == [0, 1, 2, 3, 4]
    first = next(span for span in spans if span.row == 0)
    assert first.turn == pytest.approx(2.0 * np.pi / 5.0, rel=0.05)
    np.testing.assert_allclose(first.where, 10.0 * np.array([np.cos(np.pi / 5), np.sin(np.pi / 5)]), atol=0.6)
    assert first.along == pytest.approx(2.0 * np.pi, rel=0.05)
    assert sparse_spans(spline_through(circle(12), ends="periodic"), node_parameters(circle(12), closed=True)) == []


def test_the_tightest_span_comes_first():
    x = np.array([0.0, 2.0, 4.0, 5.0, 6.0, 8.0, 10.0])
    p = np.stack([x, np.where(x == 5.0, 4.0, 0.1 * np.abs(x - 5.0))], axis=1)
    spans = sparse_spans(spline_through(p), node_parameters(p), most_turn=0.9)
    assert len(spans) > 1
    turns = [span.turn for span in spans]
    assert turns == sorted(turns, reverse=True)
    assert all(span.turn > 0.9 for span in spans)
