"""Bands of deviation: the steps in which a map shows how far and to which side NEW lies from OLD, and their colours.

Colours are those of the diverging scheme RdBu (11 classes) by Cynthia Brewer, Pennsylvania State University, in
ColorBrewer 2 (colorbrewer2.org; the values from memory), which tell plus from minus to people with any common
colour-vision deficiency; the middle is a grey. Printed in grey the amount shows by lightness and line width, the side
by the dashes of minus.
"""

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from geometry.arrays import FloatArray, IntArray

if TYPE_CHECKING:
    from converter.jobs.comparison import Comparison, Limits

__all__ = ["NEAR", "Band", "Bands", "bands_for", "bands_of", "largest_of", "round_step"]

NEAR = 3
"""Index of the middle band; those before it are minus, those after it plus."""
_KEYS = ("minus_far", "minus_out", "minus_within", "near", "plus_within", "plus_out", "plus_far")
_STEPS = ("minus_3", "minus_2", "minus_1", "near", "plus_1", "plus_2", "plus_3")
# for any background, for a light one, for a dark one
_COLOURS = (
    ("#2166ac", "#053061", "#d1e5f0"),
    ("#4393c3", "#2166ac", "#92c5de"),
    ("#92c5de", "#4393c3", "#4393c3"),
    ("#c0c0c0", "#949494", "#6e757d"),
    ("#f4a582", "#d6604d", "#d6604d"),
    ("#d6604d", "#b2182b", "#f4a582"),
    ("#b2182b", "#67001f", "#fddbc7"),
)
_INDEX_COLOURS = (163, 142, 141, 9, 21, 11, 242)  # the nearest of the 255 that every DXF version has
_NOTHING = 1e-7  # of the size of a profile: deviations along are not told finer than this
_WEIGHTS = (4, 3, 2, 1, 2, 3, 4)


@dataclass(frozen=True, slots=True)
class Band:
    """One step of deviation.

    Attributes:
        key: its name in tables, such as `plus_out`.
        layer: its layer in a map.
        meaning: its limits in words, with sign and unit.
        out: whether it is out of tolerance; None where there is none.
        side: -1 inside or right of OLD, 0 on either side, 1 outside or left.
        colour, light, dark: `#rrggbb` for any background, for a light page and for a dark page.
        index_colour: colour number of DXF nearest to `colour`.
        weight: line width, in steps from 1.
    """

    key: str
    layer: str
    meaning: str
    out: bool | None
    side: int
    colour: str
    light: str
    dark: str
    index_colour: int
    weight: int

    @property
    def dashed(self) -> bool:
        """Whether its lines are dashed: those of the minus side."""
        return self.side < 0


@dataclass(frozen=True, slots=True, eq=False)
class Bands:
    """Seven bands from the far minus to the far plus side.

    Attributes:
        plus, minus: where bands end on each side, as sizes, shape (3,), rising, drawing units.
        bands: in order of deviation.
        judged: whether the bands follow limits; otherwise round steps.
    """

    plus: FloatArray
    minus: FloatArray
    bands: tuple[Band, ...]
    judged: bool

    def index(self, deviation: FloatArray) -> IntArray:
        """Return the band of each deviation, shape (n,); one at the end of a band still belongs to it."""
        above = np.searchsorted(self.plus, deviation, side="left")
        below = np.searchsorted(self.minus, -deviation, side="left")
        return np.asarray(NEAR + np.where(deviation > 0.0, above, -below), dtype=np.intp)

    def edges(self) -> FloatArray:
        """Return the signed deviations at which a band ends, rising, shape (6,), drawing units."""
        return np.concatenate([-self.minus[::-1], self.plus])


def bands_of(comparison: "Comparison") -> Bands:
    """Return the bands of a comparison: by its limits, otherwise by the largest deviation found."""
    unit = "" if comparison.record.units == "unitless" else f" {comparison.record.units}"
    return bands_for(comparison.limits, largest_of(comparison), unit)


def largest_of(comparison: "Comparison") -> float:
    """Return the largest deviation a map has to show, drawing units; 0 where there is none but rounding."""
    largest = 0.0
    for pair in comparison.pairs:
        low, high = pair.new.bounds()
        nothing = _NOTHING * float(np.linalg.norm(high - low) + 1e-6 * np.abs([low, high]).max())
        peaks = [abs(zone.peak) for zone in pair.record.zones]
        found = max([float(np.abs(pair.course.deviation).max(initial=0.0)), *peaks])
        largest = max(largest, found if found > nothing else 0.0)
    return largest


def bands_for(limits: "Limits | None", largest: float, unit: str = "") -> Bands:
    """Return bands: halves, wholes and doubles of the limits, or one to three round steps.

    Args:
        limits: None where no tolerance was stated.
        largest: largest deviation, drawing units, which sets the steps where there are no limits.
        unit: what follows a number, with a space before it.
    """
    if limits is None:
        step = round_step(0.25 * largest) if largest > 0.0 else 1.0
        plus = minus = step * np.array([1.0, 2.0, 3.0])
    else:
        plus, minus = (limit * np.array([0.5, 1.0, 2.0]) for limit in (limits.plus, limits.minus))
    names = _STEPS if limits is None else _KEYS
    bands = []
    for k, key in enumerate(names):
        size, sign, side = (plus, "+", 1) if k > NEAR else (minus, "-", -1)
        rank = abs(k - NEAR)
        if rank == 0:
            meaning, side = f"-{minus[0]:.4g} to +{plus[0]:.4g}{unit}", 0
        elif rank == len(plus):
            meaning = f"beyond {sign}{size[-1]:.4g}{unit}"
        else:
            meaning = f"{sign}{size[rank - 1]:.4g} to {sign}{size[rank]:.4g}{unit}"
        out = None if limits is None else rank > 1
        meaning += "" if out is None else ", out of tolerance" if out else ", within"
        bands.append(
            Band(key, f"MAP_NEW_{key.upper()}", meaning, out, side, *_COLOURS[k], _INDEX_COLOURS[k], _WEIGHTS[k])
        )
    return Bands(plus, minus, tuple(bands), limits is not None)


def round_step(least: float) -> float:
    """Return the smallest of 1, 2 and 5 times a power of ten that is not below a number above 0."""
    power = math.floor(math.log10(least))
    for exponent in (power, power + 1):
        for digit in (1, 2, 5):
            step = float(f"{digit}e{exponent}")
            if step >= least * (1.0 - 1e-12):
                return step
    raise AssertionError(f"no round step at or over {least!r}")
