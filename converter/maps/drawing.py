"""The deviation map as a DXF drawing: both profiles, NEW in stretches by band, whiskers, zone labels and a legend."""

import io
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any, BinaryIO

import numpy as np

from converter.drawing import supports
from converter.drawing.save import VERSIONS
from converter.drawing.write import add_polyline
from converter.errors import VersionError
from converter.files import check_output, write_whole
from converter.maps.bands import NEAR
from converter.maps.legend import label_of, legend_lines, plain
from converter.maps.plan import CHORD_SHARE, Mark, Plan, plan_of
from geometry.arcs import ArcChain
from geometry.arrays import FloatArray
from geometry.bspline import Spline

if TYPE_CHECKING:
    from converter.drawing import AnyCurve
    from converter.jobs.comparison import Comparison

__all__ = ["write_map"]

_OLD, _MISSING, _ZONES, _LEGEND = "MAP_OLD", "MAP_MISSING", "MAP_ZONES", "MAP_LEGEND"
_ONLY_OLD, _ONLY_NEW = "MAP_ONLY_OLD", "MAP_ONLY_NEW"
# layer, colour for any background, nearest colour number, line width in 1/100 mm, dashed
_OTHERS = (
    (_OLD, "#8c8c8c", 252, 13, False),
    (_MISSING, "#e08214", 30, 50, True),
    (_ONLY_OLD, "#8073ac", 185, 35, True),
    (_ONLY_NEW, "#8073ac", 185, 35, False),
    (_ZONES, "#808080", 8, 13, False),
    (_LEGEND, "#808080", 8, 13, False),
)
_WIDTHS = (13, 13, 25, 35, 50)  # by weight of a band, 1/100 mm
_TEXT = 1.0 / 80.0  # height of text, of the size of the map
_MOST_LABELS, _TRIES = 200, 4
_DASHES = "MAP_DASHED"


def write_map(
    comparison: "Comparison",
    path: Path,
    version: str | None = None,
    whiskers: float | None = None,
    force: bool = False,
    inputs: Sequence[Path] = (),
) -> None:
    """Write the deviation map of a comparison as a new DXF drawing in the units and coordinates of OLD.

    Arcs stay arcs; splines are drawn as polylines within 1e-6 of the size of the map. Profiles in space are 3-D
    polylines.

    Args:
        comparison: as measured.
        path: the output; it appears whole or not at all.
        version: R12 to R2018; None for R2010.
        whiskers: how many times its size a deviation is drawn; None for a round number that shows.
        force: whether an existing file may be replaced.
        inputs: files that must never be written.

    Raises:
        OutputError: the output exists without `force`, is an input, or cannot be written.
        VersionError: the version is unknown.
    """
    from ezdxf.document import Drawing as Document

    check_output(path, force, inputs)
    name = (version or "R2010").upper()
    if name not in VERSIONS:
        raise VersionError(f"{version!r} is not a DXF version that can be written; choose one of {', '.join(VERSIONS)}")
    plan = plan_of(comparison, whiskers)
    document = Document.new(VERSIONS[name])
    if name != "R12":  # which has no place for units
        document.units = comparison.old_drawing.units.code
    _add_layers(document, plan)
    sheet = _Sheet(document.modelspace(), name, plan)
    for pair, parts, group in zip(comparison.pairs, plan.stretches, plan.whiskers, strict=True):
        sheet.curve(pair.old, _OLD)
        for part in parts:
            sheet.curve(part.curve, plan.bands.bands[part.band].layer)
        for base, tip, band in zip(group.base.tolist(), group.tip.tolist(), group.band.tolist(), strict=True):
            sheet.line(base, tip, _whisker_layer(plan, band))
    for layer, alone in ((_ONLY_OLD, comparison.only_old), (_ONLY_NEW, comparison.only_new)):
        for _, _, curve in alone:
            sheet.curve(curve, layer)
    sheet.marks(comparison)
    low, high = sheet.legend(comparison)
    document.header["$EXTMIN"], document.header["$EXTMAX"] = (*low.tolist(), 0.0), (*high.tolist(), 0.0)
    document.set_modelspace_vport(1.05 * max(*(high - low).tolist()), (0.5 * (low + high)).tolist())
    write_whole(path, lambda stream: _write(document, stream), force, inputs)


def _write(document: Any, stream: BinaryIO) -> None:
    text = io.TextIOWrapper(stream, encoding=document.output_encoding, errors="dxfreplace", newline="\n")
    document.write(text)
    text.flush()
    text.detach()


def _whisker_layer(plan: Plan, band: int) -> str:
    return "MAP_WHISKER_" + plan.bands.bands[band].key.upper()


def _add_layers(document: Any, plan: Plan) -> None:
    dash = 0.012 * plan.size
    document.linetypes.add(_DASHES, [1.5 * dash, dash, -0.5 * dash], description="Map, minus side __ __ __")
    rows = list(_OTHERS)
    for band in plan.bands.bands:
        rows.append((band.layer, band.colour, band.index_colour, _WIDTHS[band.weight], band.dashed))
        rows.append(("MAP_WHISKER_" + band.key.upper(), band.colour, band.index_colour, 13, False))
    for name, colour, index, width, dashed in rows:
        layer = document.layers.add(name, color=index, lineweight=width, linetype=_DASHES if dashed else "Continuous")
        layer.rgb = tuple(int(colour[k : k + 2], 16) for k in (1, 3, 5))


class _Sheet:
    """Where the map is drawn."""

    def __init__(self, space: Any, version: str, plan: Plan) -> None:
        self._space, self._version, self._plan = space, version, plan
        self._height = _TEXT * plan.size
        self._taken: list[FloatArray] = []  # boxes of labels: rows of low and high corner

    def curve(self, curve: "AnyCurve", layer: str) -> None:
        if isinstance(curve, Spline):
            curve = curve.flatten(CHORD_SHARE * self._plan.size)
        if curve.dimension == 3:
            self._space.add_polyline3d(curve.points.tolist(), close=curve.closed, dxfattribs={"layer": layer})
            return
        values = np.zeros((len(curve.points), 5))
        values[:, :2] = curve.points
        if isinstance(curve, ArcChain):
            values[: len(curve.bulges), 4] = curve.bulges
        if not supports(self._version, "LWPOLYLINE"):
            add_polyline(self._space, values, 0.0, int(curve.closed), {"layer": layer})
            return
        entity = self._space.new_entity("LWPOLYLINE", {"layer": layer})
        entity.lwpoints.values = values
        entity.dxf.flags = int(curve.closed)

    def line(self, start: Sequence[float], end: Sequence[float], layer: str) -> None:
        self._space.add_line(tuple(start), tuple(end), dxfattribs={"layer": layer})

    def sample(self, start: Sequence[float], end: Sequence[float], layer: str) -> None:
        """Draw a line of the legend that looks like those of a layer without lying on it."""
        look = self._space.doc.layers.get(layer)
        line = self._space.add_line(tuple(start), tuple(end), dxfattribs={"layer": _LEGEND, "color": look.color})
        line.rgb, line.dxf.linetype, line.dxf.lineweight = look.rgb, look.dxf.linetype, look.dxf.lineweight

    def text(self, words: str, at: FloatArray, layer: str, align: str = "MIDDLE_LEFT", size: float = 1.0) -> None:
        from ezdxf.enums import TextEntityAlignment

        text = self._space.add_text(plain(words), height=size * self._height, dxfattribs={"layer": layer})
        text.set_placement(tuple(at.tolist()), align=TextEntityAlignment[align])

    def marks(self, comparison: "Comparison") -> None:
        """Draw the whisker at the peak of every zone, labels beside the highest, and what NEW misses."""
        for mark in self._plan.marks:
            missing = mark.zone.along_profile == "old"
            peak = np.array([mark.zone.peak])
            layer = _MISSING if missing else _whisker_layer(self._plan, int(self._plan.bands.index(peak)[0]))
            self.line(mark.base, mark.tip, layer)
        for mark in self._plan.marks[:_MOST_LABELS]:
            self._label(mark, label_of(mark, comparison.record.units))

    def _label(self, mark: Mark, words: str) -> None:
        """Write a label beyond the tip of a whisker, a little farther out where a higher one is in the way."""
        base, tip = np.array(mark.base[:2]), np.array(mark.tip[:2])
        away = tip - base
        length = float(np.linalg.norm(away))
        away = away / length if length > 0.0 else np.array([1.0, 0.0])
        wide = 0.95 * self._height * len(words)
        side = 0 if abs(away[0]) < 0.5 else int(np.sign(away[0]))  # of the whisker's end that the label lies on
        for step in range(_TRIES):
            at = tip + (1.2 + 1.6 * step) * self._height * away
            low = at + np.array([0.5 * (side - 1) * wide, -0.75 * self._height])
            box = np.stack([low, low + np.array([wide, 1.5 * self._height])])
            if not any((box[0] < other[1]).all() and (other[0] < box[1]).all() for other in self._taken):
                break
        else:
            return
        self._taken.append(box)
        if step:
            self.line(tip.tolist(), (at - 0.9 * self._height * away).tolist(), _ZONES)
        self.text(words, at, _ZONES, ("MIDDLE_RIGHT", "MIDDLE_CENTER", "MIDDLE_LEFT")[side + 1])

    def legend(self, comparison: "Comparison") -> tuple[FloatArray, FloatArray]:
        """Draw the legend right of the drawing; return the corners of the whole map."""
        plan, height = self._plan, self._height
        low, high = plan.low - 0.08 * plan.size, plan.high + 0.08 * plan.size
        boxes = [low, high, *(corner for box in self._taken for corner in box)]
        low, high = np.min(boxes, axis=0), np.max(boxes, axis=0)
        left = high[0] + 2.0 * height
        top = high[1]
        samples = {_OLD: "OLD", **{band.layer: f"NEW {band.meaning}" for band in plan.bands.bands[::-1]}}
        if comparison.pairs and comparison.pairs[0].new.dimension == 3:
            samples = {name: words for k, (name, words) in enumerate(samples.items()) if k <= NEAR + 1}
        used = {
            _MISSING: any(mark.zone.along_profile == "old" for mark in plan.marks),
            _ONLY_OLD: bool(comparison.only_old),
            _ONLY_NEW: bool(comparison.only_new),
        }
        words = {_MISSING: "OLD that NEW misses", _ONLY_OLD: "only in OLD", _ONLY_NEW: "only in NEW"}
        samples |= {name: words[name] for name, is_used in used.items() if is_used}
        y, widest = top - height, 0
        self.text("Deviation map", np.array([left, y]), _LEGEND, size=1.6)
        y -= 2.4 * height
        for name, meaning in samples.items():
            self.sample((left, y), (left + 6.0 * height, y), name)
            self.text(meaning, np.array([left + 7.5 * height, y]), _LEGEND)
            widest = max(widest, len(meaning) + 8)
            y -= 1.8 * height
        y -= 0.8 * height
        lines = legend_lines(comparison, plan)
        if len(plan.marks) > len(self._taken):
            lines += [
                "",
                f"{len(plan.marks) - len(self._taken)} of {len(plan.marks)} zones have no label for want of room",
            ]
        for line in lines:
            if line:
                self.text(line, np.array([left, y]), _LEGEND)
            widest = max(widest, len(line))
            y -= (1.7 if line else 0.8) * height
        return np.minimum(low, [low[0], y]), np.array([left + widest * height, high[1]])
