"""What a drawing is to a job: profiles made of the shared curve types, and everything else untouched."""

from collections import Counter
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

from converter.errors import NoProfileError
from converter.units import Length, Unit, to_drawing_units
from geometry.arcs import ArcChain
from geometry.arrays import FloatArray
from geometry.bspline import Spline
from geometry.polyline import Polyline

__all__ = ["PLAN", "AnyCurve", "Drawing", "Frame", "NearGap", "Profile", "Skipped"]

AnyCurve = Polyline | ArcChain | Spline


@dataclass(frozen=True, slots=True)
class Frame:
    """The plane of a planar profile: its coordinates are x, y of this frame.

    Attributes:
        extrusion: unit normal of the plane; (0, 0, 1) for every plane parallel to the drawing plane.
        elevation: distance of the plane from the origin along the normal, drawing units.
    """

    extrusion: tuple[float, float, float] = (0.0, 0.0, 1.0)
    elevation: float = 0.0

    @property
    def level(self) -> bool:
        """Whether the plane is parallel to the drawing plane, so that frame and world share x and y."""
        return self.extrusion == (0.0, 0.0, 1.0)

    def axes(self) -> FloatArray:
        """Return the unit axes of the frame as rows, shape (3, 3).

        Source: DXF Reference, "Arbitrary Axis Algorithm".
        """
        normal = np.array(self.extrusion)
        steep = abs(normal[0]) < 1.0 / 64.0 and abs(normal[1]) < 1.0 / 64.0
        x_axis = np.cross([0.0, 1.0, 0.0] if steep else [0.0, 0.0, 1.0], normal)
        x_axis /= np.linalg.norm(x_axis)
        return np.stack([x_axis, np.cross(normal, x_axis), normal])

    def to_world(self, points: FloatArray) -> FloatArray:
        """Return world coordinates, shape (n, 3), of points in the frame, shape (n, 2); (n, 3) are world already."""
        if points.shape[1] == 3:
            return points
        local = np.column_stack([points, np.full(len(points), self.elevation)])
        return local if self.level else local @ self.axes()


PLAN = Frame()


@dataclass(frozen=True, slots=True, eq=False)
class Profile:
    """One chain of geometry from the drawing.

    Attributes:
        id: handle of the first source entity.
        layer: layer of all its sources.
        handles, types: handle and DXF type of every source, in order of travel.
        closed: whether the end meets the start.
        parts: curves in order of travel, each starting where the one before ends (within the drawing's gap). A
            single part of a closed profile is closed itself; where there are more, each is open.
        vertices_in: vertices as drawn (control or fit points of a SPLINE, ends of lines and arcs), joints once.
        frame: plane of a 2-D profile; of no meaning to a 3-D one, whose points are world coordinates.
        curved: whether any source is a true curve (bulge, ARC, CIRCLE, ELLIPSE, SPLINE).
        approximation: bound on the distance between `parts` and what is drawn, drawing units; 0 when exact, which
            it is for all but ELLIPSE, rational SPLINE and SPLINE above degree 3.
    """

    id: str
    layer: str
    handles: tuple[str, ...]
    types: tuple[str, ...]
    closed: bool
    parts: tuple[AnyCurve, ...]
    vertices_in: int
    frame: Frame
    curved: bool
    approximation: float = 0.0

    @property
    def dimension(self) -> int:
        """2 for a planar profile, 3 where z varies along it."""
        return self.parts[0].dimension

    @property
    def elevation(self) -> float:
        """Height of the plane of a 2-D profile along its extrusion, drawing units."""
        return self.frame.elevation

    @property
    def extrusion(self) -> tuple[float, float, float]:
        """Normal of the plane of a 2-D profile; (0, 0, 1) also for sources drawn from below, which are turned over."""
        return self.frame.extrusion

    def flatten(self, delta: float) -> Polyline:
        """Return the whole profile as a polyline, vertices of true polylines kept exactly.

        Args:
            delta: largest distance allowed between `parts` and the result, drawing units, above 0.
        """
        if len(self.parts) == 1:
            return self.parts[0].flatten(delta)
        pieces = [part.flatten(delta).points for part in self.parts]
        points = np.concatenate([pieces[0], *(piece[1:] for piece in pieces[1:])])
        return Polyline(points[:-1] if self.closed else points, self.closed)

    def length(self) -> float:
        """Return the arc length, drawing units."""
        return sum(part.length() for part in self.parts)

    def area(self) -> float:
        """Return the signed area in the plane of the profile, anticlockwise positive; 0 when open or not planar.

        Of a single curve it is exact; a chain of several is flattened to 1e-6 of its size first.
        """
        if len(self.parts) == 1:
            return self.parts[0].area()
        low, high = self.world_bounds()
        return self.flatten(1e-6 * float(np.linalg.norm(high - low))).area()

    def world_bounds(self) -> tuple[FloatArray, FloatArray]:
        """Return the least and greatest world coordinates, shapes (3,); those of a tilted curve to 1e-3 of its size."""
        low = np.full(3, np.inf)
        high = np.full(3, -np.inf)
        for part in self.parts:
            if part.dimension == 2 and not self.frame.level:
                size = float(np.ptp(np.stack(part.bounds()), axis=0).max())
                ends = self.frame.to_world(part.flatten(1e-3 * size if size > 0.0 else 1.0).points)
            else:
                ends = self.frame.to_world(np.stack(part.bounds()))
            low, high = np.minimum(low, ends.min(axis=0)), np.maximum(high, ends.max(axis=0))
        return low, high


@dataclass(frozen=True, slots=True)
class Skipped:
    """An entity that could have been a profile but cannot be used; it passes through unchanged."""

    handle: str
    type: str
    reason: str


@dataclass(frozen=True, slots=True)
class NearGap:
    """Two free ends that do not meet but lie close to one another.

    Attributes:
        size: distance between the ends, drawing units.
        place: point midway between them, world coordinates.
        layer: layer of both.
        profiles: ids of their profiles; the same twice when a profile nearly closes.
    """

    size: float
    place: tuple[float, float, float]
    layer: str
    profiles: tuple[str, str]


@dataclass(slots=True, eq=False)
class Drawing:
    """A drawing as read.

    Attributes:
        document: the ezdxf document; jobs change it through `replace` only.
        path: the file it came from, which is never written.
        version: DXF version, R12 to R2018.
        units: unit of its lengths, by $INSUNITS or as overridden.
        profiles: in drawing order of their first sources.
        passed_through: entities that are not profiles or not chosen, by DXF type (model and paper space).
        in_blocks: entities inside block definitions, by DXF type; they too pass through.
        skipped: entities that could have been profiles, with the reason.
        gap: distance at or under which ends were joined, drawing units.
        extents: least and greatest world coordinates of the chosen profiles; None without any.
        near_gaps: ends that lie close but were not joined, the smallest gap first.
        warnings: what the user should know, one line each.
        layers: as chosen; empty for all.
        order: place of every entity of the model space in the drawing order, by handle.
        replaced: ids of the profiles that have been replaced.
    """

    document: Any
    path: Path
    version: str
    units: Unit
    profiles: list[Profile]
    passed_through: Counter[str]
    in_blocks: Counter[str]
    skipped: list[Skipped]
    gap: float
    extents: tuple[FloatArray, FloatArray] | None
    near_gaps: list[NearGap]
    warnings: list[str]
    layers: tuple[str, ...] = ()
    order: dict[str, int] = field(default_factory=dict)
    replaced: set[str] = field(default_factory=set)

    def length(self, length: Length) -> float:
        """Return a typed length in drawing units; errors as `to_drawing_units`."""
        return to_drawing_units(length, self.units)

    def require_profiles(self) -> None:
        """Check that there is something to work on.

        Raises:
            NoProfileError: the drawing or the chosen layers hold no profile.
        """
        if self.profiles:
            return
        where = f" on layer {', '.join(self.layers)}" if self.layers else " in its model space"
        why = f" ({self.skipped[0].type} {self.skipped[0].handle}: {self.skipped[0].reason})" if self.skipped else ""
        raise NoProfileError(
            f"{self.path}: no profile{where}{why}; run `fairbatten inspect` to see what the file holds"
        )
