"""Which form a profile is written in, what other forms would take, and what a person has to know about the choice."""

from converter.drawing import Profile, supports
from converter.jobs.forms import Result, Search
from converter.jobs.records import ChoiceRecord, ProfileRecord
from converter.jobs.settings import FairSettings, Stated
from converter.jobs.writing import Form, Writing, Written, beyond_radii, least_of, rounding_of, sharper_turns
from geometry.arrays import FloatArray

__all__ = ["choices", "found", "not_kept", "possible_form"]

_PLACES = 3  # of arcs beyond a limit that are named


def possible_form(form: Form, profile: Profile, version: str) -> tuple[Form, list[str]]:
    """Return the form that the DXF version and the profile allow, and what has to be said about it."""
    said = []
    if profile.dimension == 3 and form == "arcs":
        form = "spline"
        said.append("arcs lie in a plane and this profile does not: written as a spline")
    if form == "spline" and not supports(version, "SPLINE"):
        form = "arcs" if profile.dimension == 2 else "lines"
        said.append(f"DXF {version} has no SPLINE: written as {form}")
    return form, said


def found(search: Search, writing: Writing, lengths: Stated, budget: int | None) -> tuple[Result | None, bool]:
    """Return the curve of a form, and whether it keeps the budget.

    Where the whole tolerance does not reach the budget it is the curve with the fewest entities.
    """
    if budget is not None:
        result, reached = search.within_budget(budget, writing)
        if result is not None:
            return result, reached
    return search.best(lengths.chord_error_for(search.tolerance), writing), budget is None


def choices(
    search: Search,
    record: ProfileRecord,
    written: Form,
    lengths: Stated,
    settings: FairSettings,
    profile: Profile,
    version: str,
) -> list[ChoiceRecord]:
    """Return what every form that was asked for takes, the written one first; none where only one was asked for.

    A form that the version or the profile does not allow, or in which no curve is found, is told in `record`.
    """
    if not settings.also:
        return []
    assert record.deviation is not None
    assert record.chord_error is not None
    first = ChoiceRecord(
        written,
        record.entities,
        record.least,
        record.chord_error,
        record.deviation.certified,
        record.within_tolerance,
        record.within_budget,
    )
    counted = [first]
    for form in settings.also:
        possible, said = possible_form(form, profile, version)
        if possible != form:
            record.warnings.append(f"{form} not counted: {said[-1].split(':')[0]}")
            continue
        if form == written:
            continue  # the first form is not possible here and was written as this one
        writing = lengths.writing_as(form)
        result, reached = found(search, writing, lengths, settings.budget)
        if result is None:
            record.warnings.append(f"{form} not counted: no fair curve keeps the tolerance; state a larger one")
            continue
        counted.append(
            ChoiceRecord(
                form,
                result.entities,
                least_of(result.faired.spline, result.faired.circle, result.chord_error, writing),
                result.chord_error,
                result.deviation.certified + search.slack + rounding_of(result.curve, writing.decimals),
                result.within,
                reached,
            )
        )
    return counted


def not_kept(result: Result, written: Written, writing: Writing, origin: FloatArray, budget: int | None) -> list[str]:
    """Return which limits a curve does not keep; a budget of None is kept.

    Args:
        result: the curve as it was found.
        written: as it is written, rounded.
        writing: its limits.
        origin: what `result` lies from the coordinates of the drawing.
        budget: that is not kept.
    """
    said = []
    if budget is not None:
        said.append(
            f"a budget of {budget} entities is not reached within the tolerance: the fewest found are "
            f"{result.entities}; state more of them or a larger tolerance"
        )
    sharper = sharper_turns(result.curve, written, writing.max_turn)
    if sharper:
        said.append(
            f"rounding to {writing.decimals} decimals makes {sharper} vertices turn by more than was asked for; state "
            "more of them"
        )
    beyond = beyond_radii(result.curve, writing)
    if beyond:
        low = "" if writing.least_radius is None else f" from {writing.least_radius:.4g}"
        high = "" if writing.most_radius is None else f" to {writing.most_radius:.4g}"
        places = ", ".join(
            f"{radius:.4g} near ({point[0] + origin[0]:.4g}, {point[1] + origin[1]:.4g})"
            for radius, point in beyond[:_PLACES]
        )
        more = f" and {len(beyond) - _PLACES} more" if len(beyond) > _PLACES else ""
        said.append(f"radii{low}{high} are not kept within the tolerance: {places}{more}")
    return said
