"""Settings of the job `fair` as they are stated, and what they come to in the units of a drawing."""

import math
from dataclasses import dataclass

from converter.drawing import Drawing
from converter.errors import LengthError, SettingsError
from converter.jobs.writing import Form, Writing
from converter.units import Length

__all__ = ["CHORD_SHARE", "MOST_ROUNDING", "FairSettings", "Stated", "stated"]

CHORD_SHARE = 0.1  # of the tolerance, when no chord error is stated
MOST_ROUNDING = 0.25  # of the tolerance
_OF_FORM = {
    "on_curve": "lines",
    "max_step": "lines",
    "max_turn": "lines",
    "least_radius": "arcs",
    "most_radius": "arcs",
}
_OPTION = {
    "on_curve": "--vertices on-curve",
    "max_step": "--max-step",
    "max_turn": "--max-turn",
    "least_radius": "--least-radius",
    "most_radius": "--most-radius",
}
_MOST_DECIMALS = 15


@dataclass(frozen=True, slots=True)
class FairSettings:
    """How to fair.

    Attributes:
        tolerance: largest distance between given and written, both ways; None chooses it for each profile.
        form: what to write.
        also: other forms to count for comparison; they are not written.
        degree: of splines, 2 or 3.
        chord_error: share of the tolerance that writing few entities may spend; None takes a tenth.
        budget: most entities a profile; the smallest chord error that keeps it is taken. None for no limit.
        on_curve: lines only: whether vertices must lie on the curve.
        max_step: lines only: longest segment.
        max_turn: lines only: largest turn at a vertex that is no corner, degrees.
        least_radius, most_radius: arcs only: radii that arcs should keep.
        decimals: places that written coordinates are rounded to; None writes them in full.
        corner_angle: degrees above which a vertex is a corner; None finds the true corners.
        corners_on: layer whose POINT entities mark corners; None for none.
        redraw: whether true curves (CIRCLE, ARC, ELLIPSE, SPLINE) are drawn afresh too.
        layers: layers to take profiles from; empty for all.
        gap: ends nearer than this are joined; None takes 1e-6 of the extent.
        units: name of the drawing's unit, overriding $INSUNITS.
        version: DXF version to write; None keeps the drawing's.
        force: whether an existing output may be replaced.
    """

    tolerance: Length | None = None
    form: Form = "spline"
    also: tuple[Form, ...] = ()
    degree: int = 3
    chord_error: Length | None = None
    budget: int | None = None
    on_curve: bool = False
    max_step: Length | None = None
    max_turn: float | None = None
    least_radius: Length | None = None
    most_radius: Length | None = None
    decimals: int | None = None
    corner_angle: float | None = None
    corners_on: str | None = None
    redraw: bool = False
    layers: tuple[str, ...] = ()
    gap: Length | None = None
    units: str | None = None
    version: str | None = None
    force: bool = False


@dataclass(frozen=True, slots=True)
class Stated:
    """Lengths of the settings in drawing units.

    Attributes:
        tolerance: None where each profile chooses its own.
        chord_error: None where it is a tenth of the tolerance.
        writing: how to write, for the first form.
    """

    tolerance: float | None
    chord_error: float | None
    writing: Writing

    def writing_as(self, form: Form) -> Writing:
        """Return how to write another form: limits that do not concern it are left out."""
        kept = {name: getattr(self.writing, name) for name, of in _OF_FORM.items() if of == form}
        return Writing(form, decimals=self.writing.decimals, **kept)

    def chord_error_for(self, tolerance: float) -> float:
        """Return the chord error of a profile whose tolerance is this."""
        share = self.chord_error if self.chord_error is not None else CHORD_SHARE * tolerance
        return min(share, 0.9 * tolerance)


def stated(settings: FairSettings, drawing: Drawing) -> Stated:
    """Return the settings in the units of a drawing.

    Raises:
        LengthError: a length is not positive, needs a unit that the drawing does not state, or contradicts another.
        SettingsError: a setting does not belong to a form that is asked for, or is out of its range.
    """
    tolerance = _positive(drawing, settings.tolerance, "tolerance")
    chord_error = _positive(drawing, settings.chord_error, "chord error")
    if tolerance is not None and chord_error is not None and chord_error >= tolerance:
        raise LengthError(
            f"chord error {settings.chord_error} is not below the tolerance {settings.tolerance}, of which it is a "
            "share; state a smaller one"
        )
    if settings.budget is not None and settings.chord_error is not None:
        raise SettingsError("a budget finds the chord error itself; state one of the two")
    if settings.budget is not None and settings.budget < 2:
        raise SettingsError(f"a budget of {settings.budget} entities draws nothing; state 2 or more")
    forms = {settings.form, *settings.also}
    for name, form in _OF_FORM.items():
        if getattr(settings, name) and form not in forms:
            asked = " and ".join(sorted(forms))
            raise SettingsError(f"{_OPTION[name]} is for {form} only, and {asked} is asked for; leave it out")
    least = _positive(drawing, settings.least_radius, "least radius")
    most = _positive(drawing, settings.most_radius, "most radius")
    if least is not None and most is not None and least >= most:
        raise LengthError(f"least radius {settings.least_radius} is not below most radius {settings.most_radius}")
    if settings.max_turn is not None and not 0.0 < settings.max_turn < 180.0:
        raise SettingsError(f"a largest turn of {settings.max_turn:g} degrees is not between 0 and 180")
    if settings.decimals is not None and not 0 <= settings.decimals <= _MOST_DECIMALS:
        raise SettingsError(f"{settings.decimals} decimals are not between 0 and {_MOST_DECIMALS}")
    writing = Writing(
        settings.form,
        settings.on_curve,
        _positive(drawing, settings.max_step, "longest step"),
        None if settings.max_turn is None else math.radians(settings.max_turn),
        least,
        most,
        settings.decimals,
    )
    if tolerance is not None and writing.rounding > MOST_ROUNDING * tolerance:
        raise SettingsError(
            f"{settings.decimals} decimals move points by up to {writing.rounding:.3g}, too much for a tolerance of "
            f"{settings.tolerance}; state more of them"
        )
    if writing.step is not None and writing.step <= 0.0:
        raise SettingsError(
            f"{settings.decimals} decimals are too few for a longest step of {settings.max_step}; state more of them"
        )
    return Stated(tolerance, chord_error, writing)


def _positive(drawing: Drawing, length: Length | None, name: str) -> float | None:
    if length is None:
        return None
    value = drawing.length(length)
    if value <= 0.0 or not math.isfinite(value):
        raise LengthError(f"{name} {length} is not a length above 0; state one such as 0.2 or 0.2mm")
    return value
