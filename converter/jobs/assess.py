"""What a profile needs: faired within which tolerance, or left as drawn, and why."""

from dataclasses import dataclass

import numpy as np

from converter.drawing import Profile
from geometry.errors import GeometryError
from geometry.jaggedness import Jaggedness, estimate, is_clean_polygon
from geometry.polyline import Polyline, clean

__all__ = ["Assessment", "assess", "outline_of"]

_SMALL = 3.0  # tolerances: an extent below this leaves nothing to be fair
_FLATTENING = 1e-3  # share of the tolerance that flattening a drawn curve may cost
_COINCIDENT = 1e-12  # of the extent: vertices as near as this are one
_JAGGED_SEGMENTS = 16  # a run of this many straight segments beside true curves may be a trace


@dataclass(frozen=True, slots=True)
class Assessment:
    """What is to be done with a profile.

    Attributes:
        outline: the profile as a cleaned polyline, in its own plane; None where it cannot be had.
        tolerance: to fair within, drawing units; 0 where it is left as drawn.
        jaggedness: what kind of outline it is; None where that was not looked at.
        reason: why the tolerance, or why the profile is left as drawn.
        as_drawn: whether it is left as drawn.
        unusable: whether it is left because it cannot be handled, not because it needs nothing.
        slack: bound on the distance between the outline and the profile as drawn, drawing units.
    """

    outline: Polyline | None
    tolerance: float
    jaggedness: Jaggedness | None
    reason: str
    as_drawn: bool = False
    unusable: bool = False
    slack: float = 0.0

    @property
    def pitch(self) -> float:
        """Pixel pitch of the raster that the outline was traced from, drawing units, 0 where it was not."""
        raster = self.jaggedness is not None and self.jaggedness.kind in ("staircase", "chamfered")
        return self.jaggedness.size if raster and self.jaggedness is not None else 0.0


def assess(profile: Profile, tolerance: float | None, redraw: bool) -> Assessment:
    """Decide what a profile needs.

    Args:
        profile: any.
        tolerance: as stated, drawing units; None to choose it by the profile's jaggedness.
        redraw: whether true curves are drawn afresh as well.
    """
    if profile.curved and not redraw and not _holds_trace(profile):
        kinds = "/".join(sorted(set(profile.types)))
        return Assessment(None, 0.0, None, f"{kinds} is a true curve already", as_drawn=True)
    try:
        outline, slack = outline_of(profile, tolerance)
    except GeometryError as error:
        return Assessment(None, 0.0, None, str(error), as_drawn=True, unusable=True)
    if profile.curved:
        if tolerance is None:
            reason = "a true curve needs a stated tolerance to be drawn afresh"
            return Assessment(outline, 0.0, None, reason, as_drawn=True)
        if _is_small(outline, tolerance):
            return Assessment(outline, 0.0, None, "hardly larger than the tolerance: check the units", as_drawn=True)
        return Assessment(outline, tolerance, None, "as stated", slack=slack)
    found = estimate(outline)
    if is_clean_polygon(outline, max(tolerance or 0.0, found.tolerance)):  # steps of a trace are sides of no polygon
        return Assessment(outline, 0.0, found, "a clean polygon: every vertex is a corner", as_drawn=True)
    if tolerance is not None:
        if _is_small(outline, tolerance):
            return Assessment(outline, 0.0, found, "hardly larger than the tolerance: check the units", as_drawn=True)
        return Assessment(outline, tolerance, found, "as stated")
    if found.tolerance <= 0.0:
        hint = (
            "; spring a curve through them, or state a tolerance to fair them as an outline all the same"
            if found.kind == "stations"
            else ""
        )
        return Assessment(outline, 0.0, found, found.reason + hint, as_drawn=True)
    if _is_small(outline, found.tolerance):
        return Assessment(outline, 0.0, found, "its points scatter by as much as it is large", as_drawn=True)
    return Assessment(outline, found.tolerance, found, found.reason)


def _is_small(outline: Polyline, tolerance: float) -> bool:
    """Tell whether a profile is so small that a tolerance leaves nothing of it to be fair."""
    return float(np.ptp(outline.points, axis=0).max()) < _SMALL * tolerance


def outline_of(profile: Profile, tolerance: float | None) -> tuple[Polyline, float]:
    """Return a profile as a cleaned polyline and a bound on its distance from the profile as drawn, drawing units.

    Args:
        profile: any; vertices of polylines are kept exactly, drawn curves are flattened.
        tolerance: drawn curves are flattened to a thousandth of it; None takes 1e-6 of the extent instead.

    Raises:
        GeometryError: fewer distinct points than a curve needs, or a coordinate is not finite.
    """
    ends = np.stack([bound for part in profile.parts for bound in part.bounds()])
    extent = float(np.ptp(ends, axis=0).max())
    delta = _FLATTENING * tolerance if tolerance is not None else 1e-6 * extent
    outline, _ = clean(profile.flatten(max(delta, 1e-12 * extent, 1e-300)), _COINCIDENT * extent)
    slack = profile.approximation + (delta if profile.curved else 0.0) + _COINCIDENT * extent
    return outline, slack


def _holds_trace(profile: Profile) -> bool:
    """Tell whether a profile with true curves also holds a run of segments that is jagged in itself."""
    for part in profile.parts:
        if isinstance(part, Polyline) and len(part.points) > _JAGGED_SEGMENTS:
            try:
                run, _ = clean(part)
            except GeometryError:
                continue
            if estimate(run).tolerance > 0.0:
                return True
    return False
