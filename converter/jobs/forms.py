"""From an outline to the curve that is written: fair, economise, certify, and try again more carefully."""

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from converter.jobs.writing import Writing, Written, counts_of, economised, rounding_of
from geometry.arcs import ArcChain
from geometry.corners import Corners
from geometry.deviation import TwoSided, hausdorff
from geometry.fairing import Faired, fair_outline
from geometry.polyline import Polyline
from geometry.simple import is_simple

__all__ = ["Result", "Search"]

_SIMPLE = 1e-3  # of the tolerance: flattening for the search for crossings
_WIDTH = 1.0 / 200.0  # of the tolerance: how far certified and measured may lie apart
_CAREFUL = (1.0, 0.9, 0.75, 0.5)  # shares of the tolerance given to the fairing, one after the other
_ECONOMY = (1.0, 0.3, 0.1)  # shares of the chord error given to the economy
_COARSE = (0.1, 0.2, 0.35, 0.55, 0.8)  # chord errors tried for a budget, of the tolerance
_FINE = (0.05, 0.02, 0.01, 0.005, 0.002, 0.001)
_HALVINGS = 5


@dataclass(frozen=True, slots=True)
class Result:
    """The curve to write.

    Attributes:
        curve: in the plane of the outline.
        faired: the fair curve that it stands for.
        chord_error: what the economy was given, drawing units.
        deviation: certified distance between outline and curve, slack not included.
        within: whether the certified distance, slack included, keeps the tolerance.
        crosses: whether the curve crosses or touches itself though the outline does not.
    """

    curve: Written
    faired: Faired
    chord_error: float
    deviation: TwoSided
    within: bool
    crosses: bool

    @property
    def kept(self) -> bool:
        """Whether nothing speaks against writing it."""
        return self.within and not self.crosses

    @property
    def circle(self) -> bool:
        """Whether it is written as a CIRCLE."""
        return self.faired.circle is not None and isinstance(self.curve, ArcChain)

    @property
    def entities(self) -> int:
        """The number that a budget limits."""
        return counts_of(self.curve, self.circle).entities


class Search:
    """The search for the curves of one outline; what was faired once is kept for the next form."""

    def __init__(self, outline: Polyline, corners: Corners, tolerance: float, degree: int, slack: float) -> None:
        """Begin a search.

        Args:
            outline: cleaned, the profile as a polyline.
            corners: where the tangent may jump.
            tolerance: largest distance between profile and curve, both ways, drawing units.
            degree: of splines, 2 or 3; arcs and lines always stand for a cubic one.
            slack: bound on what comes on top of the distance between outline and curve, drawing units: the distance
                between outline and profile, and the rounding of what is written.
        """
        self.outline, self.corners, self.tolerance = outline, corners, tolerance
        self.degree, self.slack = degree, slack
        self._faired: dict[tuple[float, int], Faired] = {}

    def best(self, chord_error: float, writing: Writing) -> Result | None:
        """Return the curve of a form that keeps the tolerance, certified; the best one found where none does.

        The fairing gets the whole tolerance at first and the economy the chord error; where the certified distance of
        what comes out passes the tolerance, the economy and then the fairing get less. A circle is written as
        the circle that it is.

        Args:
            chord_error: share of the tolerance that the economy may spend, drawing units.
            writing: how to write.

        Returns:
            None where no fair curve was found at all.
        """
        best: Result | None = None
        parts = (*_ECONOMY, 0.0) if writing.form == "spline" else _ECONOMY
        for faired in self._careful(writing):
            for part in parts:
                result = self._result(faired, part * chord_error, writing)
                if result is None:
                    continue
                if best is None or (result.crosses, result.deviation.certified) < (
                    best.crosses,
                    best.deviation.certified,
                ):
                    best = result
                if result.kept:
                    return result
        return best

    def within_budget(self, budget: int, writing: Writing) -> tuple[Result | None, bool]:
        """Return the curve with the smallest chord error that takes no more entities than a budget.

        The chord error is found to within a few per cent: it is raised from a tenth of the tolerance, or lowered, until
        the count passes the budget, and then halved in between. Counts fall as the chord error grows, but not quite
        steadily, so a smaller chord error that happens to do may be missed.

        Returns:
            The curve and True; where the whole tolerance does not reach the budget, the curve with the fewest entities
            that was found and False; None and False where no curve keeps the tolerance.
        """
        inside: Result | None = None
        fewest: Result | None = None
        outside = 0.0  # the largest chord error known to take too many

        def tried(chord_error: float) -> bool:
            nonlocal inside, fewest, outside
            result = self._feasible(chord_error, writing)
            if result is not None and result.entities <= budget:
                inside = result
                return True
            outside = max(outside, chord_error)
            if result is not None and (fewest is None or result.entities < fewest.entities):
                fewest = result
            return False

        if tried(_COARSE[0] * self.tolerance):
            any(not tried(share * self.tolerance) for share in _FINE)
        else:
            any(tried(share * self.tolerance) for share in _COARSE[1:])
        if inside is None:
            return fewest, False
        for _ in range(_HALVINGS if outside > 0.0 else 0):
            tried(float(np.sqrt(inside.chord_error * outside)))
        return inside, True

    def _feasible(self, chord_error: float, writing: Writing) -> Result | None:
        """Return a curve with just this chord error that keeps the tolerance, or None."""
        for faired in self._careful(writing):
            result = self._result(faired, chord_error, writing)
            if result is not None and result.kept:
                return result
        return None

    def _careful(self, writing: Writing) -> Iterator[Faired]:
        """Yield fair curves in ever narrower bands."""
        degree = self.degree if writing.form == "spline" else 3
        for share in _CAREFUL:
            key = (share, degree)
            if key not in self._faired:
                self._faired[key] = fair_outline(self.outline, self.corners, share * self.tolerance, degree)
            if self._faired[key].as_given:
                return  # less tolerance would not help
            yield self._faired[key]

    def _result(self, faired: Faired, chord_error: float, writing: Writing) -> Result | None:
        curve = economised(faired.spline, faired.circle, chord_error, writing)
        if curve is None:
            return None
        deviation = hausdorff(self.outline, curve, _WIDTH * self.tolerance)
        within = deviation.certified + self.slack + rounding_of(curve, writing.decimals) <= self.tolerance
        crosses = within and self.outline.dimension == 2 and self._crosses(curve)
        return Result(curve, faired, chord_error, deviation, within, crosses)

    def _crosses(self, curve: Written) -> bool:
        """Tell whether a curve crosses or touches itself though the outline does not: two walls within the band."""
        drawn = curve.flatten(_SIMPLE * self.tolerance)
        return not is_simple(drawn) and is_simple(self.outline)
