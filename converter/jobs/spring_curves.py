"""From a sprung curve to what is written: the form, its limits, and points along it."""

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

import numpy as np

from converter.drawing import supports
from converter.errors import LengthError, SettingsError
from converter.jobs.settings import CHORD_SHARE
from converter.jobs.stations import Stations
from converter.jobs.writing import Writing, Written, economised
from converter.units import Length
from geometry.arrays import FloatArray
from geometry.bspline import Spline
from geometry.dense import Dense, dense_points
from geometry.errors import GeometryError
from geometry.polyline import Polyline

if TYPE_CHECKING:
    from converter.jobs.spring import SpringSettings

__all__ = ["Limits", "SpringForm", "curve_as", "limits_of"]

SpringForm = Literal["spline", "arcs", "lines", "points"]
_EXTENT_SHARE = 1e-4  # of the extent: chord error where none is stated


@dataclass(frozen=True, slots=True)
class Limits:
    """What a curve must keep, in drawing units and radians.

    Attributes:
        form: what is written.
        tolerance: within which stations are met; None for exactly.
        chord_error: between the curve and what stands for it; None where the form needs none.
        max_step, max_turn: of points and lines; None for no limit.
        keep: whether stations must be vertices.
        scale: length at which fairness is measured.
        warnings: what was chosen in place of what was asked.
    """

    form: SpringForm
    tolerance: float | None
    chord_error: float | None
    max_step: float | None
    max_turn: float | None
    keep: bool
    scale: float
    warnings: tuple[str, ...] = ()

    @property
    def at_stations(self) -> float | None:
        """Tolerance at the stations that is left to the curve when its form spends the chord error."""
        return None if self.tolerance is None else self.tolerance - (self.chord_error or 0.0)

    @property
    def allowed(self) -> float | None:
        """Largest distance from a station to what is written; None where that was left open."""
        if self.tolerance is not None:
            return self.tolerance
        open_chords = self.form == "points" and self.chord_error is None and not self.keep
        return None if open_chords else self.chord_error or 0.0


def limits_of(settings: "SpringSettings", stations: Stations, form: SpringForm, as_table: bool, version: str) -> Limits:
    """Return the settings in drawing units.

    Raises:
        LengthError: a length cannot be used.
        SettingsError: a setting does not belong to what is written.
    """
    warnings = []
    if as_table and form != "points":
        raise SettingsError(f"a table holds points, not {form}; leave --as out, or write DXF")
    in_space = [p.id for p in stations.profiles if p.points.shape[1] == 3]
    if form == "spline" and not as_table and not supports(version, "SPLINE") and settings.degree > 1:
        form = "lines" if in_space else "arcs"
        warnings.append(f"DXF {version} has no SPLINE; {form} are written")
    if form == "arcs" and in_space:
        raise SettingsError(f"arcs lie in a plane and profile {in_space[0]} in space; write spline, lines or points")
    if form in ("spline", "arcs"):
        for value, name in ((settings.max_step, "--max-step"), (settings.max_turn, "--max-turn")):
            if value is not None:
                raise SettingsError(f"{name} is for points and lines, and {form} is asked for; leave it out")
    if settings.keep and form != "points":
        raise SettingsError(f"stations are kept as vertices of points, and {form} is asked for; use --as points")
    if settings.max_turn is not None and not 0.0 < settings.max_turn < 180.0:
        raise SettingsError(f"a largest turn of {settings.max_turn:g} degrees is not between 0 and 180")
    tolerance = _positive(stations, settings.tolerance, "tolerance")
    chord_error = _positive(stations, settings.chord_error, "chord error")
    step = _positive(stations, settings.max_step, "longest step")
    turn = None if settings.max_turn is None else math.radians(settings.max_turn)
    extent = _extent(stations)
    needed = form in ("arcs", "lines") or (
        form == "points" and (tolerance is not None or (step is None and turn is None))
    )
    if chord_error is None and needed:
        chord_error = CHORD_SHARE * tolerance if tolerance is not None else _round(_EXTENT_SHARE * extent)
    if tolerance is not None and chord_error is not None and chord_error >= tolerance:
        raise LengthError(
            f"chord error {settings.chord_error} is not below the tolerance {settings.tolerance}, of which it is a "
            "share; state a smaller one"
        )
    scale = tolerance or chord_error or _EXTENT_SHARE * extent
    return Limits(form, tolerance, chord_error, step, turn, settings.keep, scale, tuple(warnings))


def _positive(stations: Stations, length: Length | None, name: str) -> float | None:
    if length is None:
        return None
    value = stations.drawing.length(length)
    if not (value > 0.0 and math.isfinite(value)):
        raise LengthError(f"{name} {length} is not a length above 0; state one such as 0.2 or 0.2mm")
    return value


def _extent(stations: Stations) -> float:
    """Return the largest diagonal of a profile."""
    return max(float(np.linalg.norm(np.ptp(profile.points, axis=0))) for profile in stations.profiles)


def _round(value: float) -> float:
    """Return a number with one figure."""
    return float(f"{value:.0e}")


def curve_as(spline: Spline, limits: Limits, keep: FloatArray | None) -> tuple[Written, Dense | None]:
    """Return a sprung curve in the form to write, and its points where that is the form.

    A curve of degree 1 is its stations: it is written as a polyline in every form but points.

    Args:
        spline: as sprung.
        limits: see `Limits`.
        keep: parameters that must be vertices of points.

    Raises:
        GeometryError: the form cannot be had within the limits.
    """
    if limits.form == "points":
        dense = dense_points(spline, limits.chord_error, limits.max_step, limits.max_turn, keep)
        return dense.polyline(), dense
    limited = limits.max_step is not None or limits.max_turn is not None
    if spline.degree == 1 and not limited:
        return Polyline(spline.control[:-1] if spline.closed else spline.control, spline.closed), None
    if limits.form == "spline" and limits.chord_error is None:
        return spline, None
    origin = spline.control[0]
    writing = Writing(limits.form, max_step=limits.max_step, max_turn=limits.max_turn)
    found = economised(spline.moved(-origin), None, limits.chord_error or 0.0, writing)
    if found is None:
        raise GeometryError(
            f"no {limits.form} within a chord error of {limits.chord_error:g} and the other limits; state larger ones"
        )
    return found.moved(origin), None
