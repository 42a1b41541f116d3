"""Comparisons made of curves, for tests of what is drawn of them."""

from pathlib import Path

import ezdxf
import numpy as np

from converter.drawing import Drawing
from converter.jobs.comparison import CompareRecord, Comparison, Limits, Transform
from converter.jobs.figures import Figure
from converter.jobs.measuring import measured
from converter.units import unit_from_name
from geometry.arcs import ArcChain
from geometry.polyline import Polyline


def drawing(name="old.dxf", units="mm"):
    unit = unit_from_name(units)
    document = ezdxf.new(units=unit.code)
    return Drawing(document, Path(name), "R2010", unit, [], {}, {}, [], 1e-6, None, [], [])


def figure(curve, handle, layer="PROFILE"):
    return Figure(handle, layer, curve.closed, ("LWPOLYLINE",), curve, 0.0, 0.0)


def comparison_of(
    pairs, limits=None, only_old=(), only_new=(), units="mm", names=("old.dxf", "new.dxf"), layer="PROFILE"
):
    """A comparison of pairs of curves (OLD, NEW); handles are A0, A1... and B0, B1..."""
    compared = [
        measured(figure(old, f"A{k}", layer), figure(new, f"B{k}", layer), "handle", limits)
        for k, (old, new) in enumerate(pairs)
    ]
    alone = [
        [(f"{word}{k}", layer, curve) for k, curve in enumerate(c)] for word, c in (("C", only_old), ("D", only_new))
    ]
    told = [
        [
            {"id": i, "layer": on, "closed": c.closed, "type": "LWPOLYLINE", "length": c.length(), "x": 0.0, "y": 0.0}
            for i, on, c in group
        ]
        for group in alone
    ]
    within = None
    if limits is not None:
        within = not any(alone) and all(pair.record.within_tolerance for pair in compared)
    record = CompareRecord(
        "compare",
        "0",
        *names,
        units,
        None,
        None,
        "none",
        Transform(),
        None,
        [pair.record for pair in compared],
        *told,
        within,
    )
    return Comparison(record, compared, *alone, limits, drawing(names[0], units), drawing(names[1], units))


def plate(rounding=8.0, width=120.0, height=70.0):
    """A plate with rounded corners, as a chain of lines and arcs."""
    w, h, r = width, height, rounding
    points = [(r, 0), (w - r, 0), (w, r), (w, h - r), (w - r, h), (r, h), (0, h - r), (0, r)]
    return ArcChain(np.array(points, dtype=float), np.array([0, np.tan(np.pi / 8)] * 4), True)


def bumped(curve, at, height, width, step=0.25):
    """A curve as a polyline with a smooth bump outwards (to the right of travel) of a height and a half width."""
    flat = curve.flatten(1e-4)
    along = np.arange(0.0, flat.length(), step)
    points, ahead = flat.at(along), flat.at(along + 1e-3) - flat.at(along - 1e-3)
    out = np.stack([ahead[:, 1], -ahead[:, 0]], axis=1) / np.linalg.norm(ahead, axis=1)[:, None]
    away = np.clip(np.abs(along - at) / width, 0.0, 1.0)
    return Polyline(points + (height * (1.0 - away**2) ** 2)[:, None] * out, curve.closed)


LIMITS = Limits(0.2, 0.2, "+-0.2 mm")


def revised(limits=LIMITS, **more):
    """A plate with a bump out of tolerance, one within, a dent, a hole that moved, and holes without a partner."""
    new = bumped(bumped(bumped(plate(), 60.0, 0.5, 12.0), 150.0, 0.15, 10.0), 250.0, -0.3, 15.0)
    hole = circle(30.0, 35.0, 9.0)
    moved = circle(30.02, 35.06, 9.0)
    return comparison_of(
        [(plate(), new), (hole, moved)], limits, [circle(90.0, 20.0, 5.0)], [circle(90.0, 50.0, 4.0)], **more
    )


def circle(x, y, radius):
    return ArcChain(np.array([[x + radius, y], [x - radius, y]]), np.ones(2), True)
