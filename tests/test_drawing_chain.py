"""Joining pieces: any order and direction, gaps, junctions, and nearly linear work."""

from itertools import pairwise

import ezdxf
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from converter.drawing import read_drawing
from converter.drawing.chain import chain_pieces, near_pairs
from converter.drawing.entities import Piece
from converter.drawing.model import PLAN
from geometry.polyline import Polyline


def line(number, a, b):
    return Piece(f"{number:X}", "LINE", "0", Polyline(np.array([a, b], dtype=float)), PLAN, 2, False)


def lines(points, order=None, flip=()):
    pairs = list(pairwise(points))
    order = range(len(pairs)) if order is None else order
    return [line(i, *(reversed(pairs[i]) if i in flip else pairs[i])) for i in order]


def path_of(chain):
    points = [piece.part.points for piece in chain.pieces]
    return np.vstack([points[0], *(p[1:] for p in points[1:])])


@settings(max_examples=60, deadline=None)
@given(st.integers(2, 30), st.booleans(), st.randoms(use_true_random=False))
def test_shuffled_and_turned_pieces_give_the_same_path(n, closed, random):
    angle = np.linspace(0, 2 * np.pi * (1 if closed else 0.7), n + 1)
    points = np.c_[np.cos(angle), 2 * np.sin(angle)]
    if closed:
        points[-1] = points[0]
    order = list(range(n))
    random.shuffle(order)
    flip = {i for i in range(n) if random.random() < 0.5}
    result = chain_pieces(lines(points.tolist(), order, flip), 1e-6, 1e-6, 0.0)
    assert len(result.chains) == 1
    assert result.chains[0].closed == closed
    assert not result.junctions
    first = result.chains[0].pieces
    drawn_first = next(piece for piece in first if piece.handle == f"{order[0]:X}")
    a, b = points[order[0]], points[order[0] + 1]
    np.testing.assert_array_equal(drawn_first.part.points, [b, a] if order[0] in flip else [a, b])  # as drawn
    path = path_of(result.chains[0])
    if closed:  # anywhere round, either way
        path = path[:-1]
        found = {tuple(p) for p in path.tolist()}
        assert found == {tuple(p) for p in points.tolist()}
    else:
        assert np.array_equal(path, points) or np.array_equal(path[::-1], points)


def test_three_ends_at_one_place_are_never_joined():
    pieces = [line(1, (0, 0), (1, 0)), line(2, (1, 0), (2, 0)), line(3, (1, 0), (1, 1)), line(4, (2, 0), (3, 0))]
    result = chain_pieces(pieces, 1e-6, 1e-6, 0.0)
    assert [[piece.handle for piece in chain.pieces] for chain in result.chains] == [["1"], ["2", "4"], ["3"]]
    assert [(j.place, j.ends) for j in result.junctions] == [((1.0, 0.0, 0.0), 3)]


def test_a_gap_larger_than_the_pieces_still_joins_rightly():
    points = [(float(i), 0.0) for i in range(11)]
    pieces = lines(points)[:5] + [line(20 + i, (6.0 + i, 0.5), (7.0 + i, 0.5)) for i in range(4)]
    apart = float(np.hypot(1.0, 0.5))
    result = chain_pieces(pieces, 0.9 * apart, 1e-6, 3.0)
    assert len(result.chains) == 2
    assert result.near_gaps[0].size == pytest.approx(apart)
    np.testing.assert_allclose(result.near_gaps[0].place, (5.5, 0.25, 0.0))
    assert result.near_gaps[0].profiles == ("0", "14")
    joined = chain_pieces(pieces, 1.1 * apart, 1e-6, 3.0)
    assert [len(chain.pieces) for chain in joined.chains] == [9]
    assert not joined.near_gaps


def test_three_free_ends_within_the_gap_are_left_and_told():
    pieces = [line(1, (0, 0), (5, 0)), line(2, (5.1, 0), (9, 0)), line(3, (5.05, 0.05), (5, 9))]
    result = chain_pieces(pieces, 0.2, 1e-6, 0.3)
    assert len(result.chains) == 3
    assert [j.ends for j in result.junctions] == [3]


def test_a_chain_closes_over_a_gap_but_a_short_piece_does_not():
    square = lines([(0, 0), (4, 0), (4, 4), (0, 4), (0, 0.1)])
    assert chain_pieces(square, 0.2, 1e-6, 0.0).chains[0].closed
    assert not chain_pieces(square, 0.05, 1e-6, 1.0).chains[0].closed
    assert chain_pieces(square, 0.05, 1e-6, 1.0).near_gaps[0].size == pytest.approx(0.1)
    assert not chain_pieces([line(1, (0, 0), (0.1, 0))], 0.2, 1e-6, 0.0).chains[0].closed


@settings(max_examples=60, deadline=None)
@given(st.integers(2, 80), st.floats(0.0, 0.6), st.integers(0, 2**32 - 1))
def test_near_pairs_agree_with_all_distances(n, radius, seed):
    rng = np.random.default_rng(seed)
    points = rng.uniform(-1, 1, (n, 3)) * [1, 1, rng.integers(0, 2)]
    points[n // 2] = points[0]
    a, b, distance = near_pairs(points, radius)
    every = np.linalg.norm(points[:, None] - points[None], axis=-1)
    i, j = np.nonzero(np.triu(every <= radius, 1))
    assert list(zip(a.tolist(), b.tolist(), strict=True)) == list(zip(i.tolist(), j.tolist(), strict=True))
    np.testing.assert_allclose(distance, every[i, j])


def test_work_grows_nearly_in_proportion(monkeypatch):
    """Counted, not timed: candidates looked at per point stay the same from 1,000 to 8,000 pieces on one vertical."""
    import converter.drawing.chain as module

    looked = []
    unique = np.unique
    monkeypatch.setattr(module.np, "unique", lambda a, **k: looked.append(a.shape[0]) or unique(a, **k))
    for n in (1000, 8000):
        points = np.c_[np.zeros(n), np.arange(n), np.zeros(n)]
        assert len(near_pairs(points, 1.0)[0]) == n - 1
    assert 0 < looked[0] < looked[1] <= 9 * looked[0]


def drawing_of(tmp_path, draw, **options):
    doc = ezdxf.new(units=4)
    draw(doc.modelspace())
    doc.saveas(tmp_path / "in.dxf")
    return read_drawing(tmp_path / "in.dxf", **options)


def test_lines_and_arcs_become_one_arc_chain(tmp_path):
    def draw(m):  # a slot, drawn out of order
        m.add_line((0, 0), (4, 0))
        m.add_line((0, 2), (4, 2))
        m.add_arc((0, 1), 1, 90, 270)
        m.add_arc((4, 1), 1, 270, 90)

    drawing = drawing_of(tmp_path, draw)
    (profile,) = drawing.profiles
    assert profile.types == ("LINE", "ARC", "LINE", "ARC")
    assert profile.closed
    assert profile.vertices_in == 4
    assert profile.id == profile.handles[0]
    (chain,) = profile.parts
    assert chain.area() == pytest.approx(8 + np.pi, rel=1e-12)


def test_splines_stay_parts_of_their_own(tmp_path):
    def draw(m):
        m.add_line((-1, 0), (0, 0))
        m.add_open_spline([(3, 0, 0), (2, 1, 0), (1, 1, 0), (0, 0, 0)])
        m.add_line((3, 0), (4, 0))
        m.add_line((4, 0), (4, 1))

    (profile,) = drawing_of(tmp_path, draw).profiles
    assert [type(part).__name__ for part in profile.parts] == ["Polyline", "Spline", "Polyline"]
    flat = profile.flatten(1e-3)
    np.testing.assert_array_equal(flat.points[[0, 1, -3, -2, -1]], [(-1, 0), (0, 0), (3, 0), (4, 0), (4, 1)])
    assert flat.length() == pytest.approx(profile.length(), rel=1e-3)
    assert len(np.unique(flat.points, axis=0)) == len(flat.points)


def test_closed_multi_part_profile_flattens_without_a_repeated_start(tmp_path):
    def draw(m):
        m.add_open_spline([(0, 0, 0), (1, 2, 0), (3, 2, 0), (4, 0, 0)])
        m.add_line((4, 0), (0, 0))

    (profile,) = drawing_of(tmp_path, draw).profiles
    assert profile.closed
    flat = profile.flatten(1e-3)
    assert flat.closed
    assert len(np.unique(flat.points, axis=0)) == len(flat.points)


def test_layers_are_not_joined_to_one_another(tmp_path):
    def draw(m):
        m.add_line((0, 0), (1, 0), dxfattribs={"layer": "A"})
        m.add_line((1, 0), (1, 1), dxfattribs={"layer": "B"})
        m.add_line((1, 0), (2, 0), dxfattribs={"layer": "a"})

    drawing = drawing_of(tmp_path, draw)
    assert [profile.layer for profile in drawing.profiles] == ["A", "B"]
    assert drawing.warnings == []


def test_junctions_are_told_with_their_place(tmp_path):
    def draw(m):
        for end in ((4, 0), (0, 4), (-4, 1)):
            m.add_line((0, 0), end)

    drawing = drawing_of(tmp_path, draw)
    assert len(drawing.profiles) == 3
    assert any("3 ends meet at (0, 0)" in warning for warning in drawing.warnings)


def test_two_lines_over_one_another_are_no_outline(tmp_path):
    def draw(m):
        m.add_line((0, 0), (4, 0))
        m.add_line((4, 0), (0, 0))

    (profile,) = drawing_of(tmp_path, draw).profiles
    assert not profile.closed
    assert len(profile.flatten(0.1).points) == 3
