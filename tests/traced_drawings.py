"""Drawings with traced outlines for the tests of `fair`, and an own measure of how far what was written lies away."""

import ezdxf
import numpy as np
import shapely

from converter.jobs.fair import FairSettings, fair_drawing
from converter.units import parse_length
from tests.tracing import circle, dense, staircase

HOOK = staircase(dense([(0.0, 0.0), (61.0, 7.0), (57.0, 43.0), (33.0, 24.0), (9.0, 47.0)], 0.1))  # five true corners
STADIUM = staircase(
    np.concatenate([circle(14.3, (20.0, 3.1))[1000:3000], np.roll(circle(14.3, (52.0, 3.1)), 1000, axis=0)[:2000]])
)
DISC = staircase(circle(30.0, (0.3, 0.4)))


def rounded(seed=0):
    """A staircase round a smooth shape with hollows."""
    angle = 2.0 * np.pi * np.arange(4000) / 4000
    phase = np.random.default_rng(seed).uniform(0.0, 2.0 * np.pi, 2)
    radius = 30.0 + 4.0 * np.cos(3.0 * angle + phase[0]) + 2.0 * np.cos(5.0 * angle + phase[1])
    return staircase(radius[:, None] * np.stack([np.cos(angle), np.sin(angle)], axis=1))


def new_drawing(version="R2010", units=4, setup=False):
    """A drawing in millimetres unless told otherwise; with linetypes when set up."""
    return ezdxf.new(version, setup=setup, units=units)


def save_outline(path, points=HOOK, units=4, closed=True, **attributes):
    """Save a drawing that holds one outline, on layer TRACE."""
    doc = new_drawing(units=units)
    points = np.asarray(points, dtype=float).tolist()
    doc.modelspace().add_lwpolyline(points, close=closed, dxfattribs={"layer": "TRACE", **attributes})
    doc.saveas(path)
    return path


def faired(source, tolerance=None, **settings):
    """Fair a drawing to out.dxf beside it; return the record and the output."""
    output = source.with_name("out.dxf")
    length = None if tolerance is None else parse_length(tolerance)
    before = source.read_bytes()
    record = fair_drawing(source, output, FairSettings(tolerance=length, force=True, **settings))
    assert source.read_bytes() == before
    return record, output


def entity(path, handle):
    """An entity of a file, read again."""
    return ezdxf.readfile(path).entitydb[handle]


def dense_points(written, step=0.05):
    """Points along a written entity, close together, shape (n, 2): splines by the drawing library, arcs by hand."""
    kind = written.dxftype()
    if kind == "SPLINE":
        knots = np.unique(np.array(written.knots))
        inside = np.linspace(0.0, 1.0, 100, endpoint=False)
        at = np.append((knots[:-1, None] + np.diff(knots)[:, None] * inside).ravel(), knots[-1])
        return np.array([tuple(p)[:2] for p in written.construction_tool().points(at.tolist())])
    if kind == "CIRCLE":
        whole = circle(written.dxf.radius, tuple(written.dxf.center)[:2])
        return np.vstack([whole, whole[:1]])
    if kind == "LWPOLYLINE":
        rows, closed = np.array(written.get_points("xyb")), written.closed
    else:
        rows = np.array([(*tuple(v.dxf.location)[:2], v.dxf.get("bulge", 0.0)) for v in written.vertices])
        closed = written.is_closed
    ends = np.roll(rows[:, :2], -1, axis=0)
    pieces = [arc_points(*row) for row in zip(rows[:, :2], ends, rows[:, 2], strict=True)][: None if closed else -1]
    last = ends[-1] if closed else rows[-1, :2]
    return shapely.get_coordinates(shapely.segmentize(shapely.LineString([*np.concatenate(pieces), last]), step))


def arc_points(start, end, bulge):
    """Points of one bulged segment, its end left out; the bulge is tan(sweep / 4), left turns positive."""
    if bulge == 0.0:
        return start[None]
    chord = end - start
    middle = 0.5 * (start + end) + (1.0 - bulge * bulge) / (4.0 * bulge) * np.array([-chord[1], chord[0]])
    turn = 4.0 * np.arctan(bulge) * np.linspace(0.0, 1.0, 200, endpoint=False)
    c, s = np.cos(turn)[:, None], np.sin(turn)[:, None]
    x, y = start - middle
    return middle + np.concatenate([c * x - s * y, s * x + c * y], axis=1)


def farthest(points, vertices):
    """Largest distance from points to the path through vertices."""
    segments = shapely.linestrings(np.stack([vertices[:-1], vertices[1:]], axis=1))
    _, distance = shapely.STRtree(segments).query_nearest(
        shapely.points(points), return_distance=True, all_matches=False
    )
    return float(distance.max())


def sampled_deviation(given, points, closed=True, step=0.05):
    """Largest distance found between given vertices and a dense run of points on the written curve, both ways.

    From the curve it is never above the true distance; from the vertices it is above it by no more than the sagitta
    between neighbouring points of the run, which is far below 1e-4 for the shapes here.
    """
    path = np.vstack([given, given[:1]]) if closed else np.asarray(given)
    along = shapely.get_coordinates(shapely.segmentize(shapely.LineString(path), step))
    return max(farthest(points, path), farthest(along, points))
