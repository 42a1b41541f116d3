"""Write the sample drawings: invented parts of an invented workshop, the same files every time.

Run from anywhere: python samples/make_samples.py [FOLDER]; without FOLDER the files beside this script are replaced.
"""

import sys
from pathlib import Path

import ezdxf
import numpy as np
from ezdxf import units
from ezdxf.document import Drawing
from numpy.typing import NDArray

Points = NDArray[np.float64]

PITCH = 0.25  # millimetres a pixel of the scan
TILT = np.radians(7.0)  # how crooked the bracket lay on the scanner
SAGITTA = 1e-4  # of the true shapes when they are drawn as polygons, millimetres


# True shapes ---------------------------------------------------------------------------------------------------------


def arc(centre: tuple[float, float], radius: float, start_deg: float, end_deg: float) -> Points:
    """Points of an arc, both ends included, turning left when end_deg is the larger."""
    sweep = np.radians(end_deg - start_deg)
    count = max(2, int(np.ceil(abs(sweep) / (2.0 * np.arccos(1.0 - SAGITTA / radius)))) + 1)
    angle = np.radians(start_deg) + np.linspace(0.0, 1.0, count) * sweep
    return np.array(centre) + radius * np.stack([np.cos(angle), np.sin(angle)], axis=1)


def cubic(*control: tuple[float, float], count: int = 200) -> Points:
    """Points of a cubic Bezier curve."""
    t = np.linspace(0.0, 1.0, count)[:, None]
    a, b, c, d = (np.array(p) for p in control)
    return a * (1 - t) ** 3 + 3 * b * t * (1 - t) ** 2 + 3 * c * t**2 * (1 - t) + d * t**3


def slot(centre: tuple[float, float], between: float, radius: float) -> Points:
    """A lying slot: two half circles and two straight sides."""
    x, y = centre
    east = arc((x + 0.5 * between, y), radius, -90.0, 90.0)
    return np.vstack([east, arc((x - 0.5 * between, y), radius, 90.0, 270.0)])


def bracket_outline(length: float = 118.0) -> Points:
    """Outer outline of the hinge bracket: seven true corners, a hollow flank, a round nose."""
    flank = cubic((length, 22.0), (74.0, 22.0), (46.0, 46.0), (46.0, 92.0))
    notch = np.array([[0.0, 54.0], [7.0, 54.0], [7.0, 40.0], [0.0, 40.0]])
    return np.vstack([[[0.0, 0.0], [length, 0.0]], flank, arc((23.0, 92.0), 23.0, 0.0, 180.0)[1:], notch])


def laid(points: Points) -> Points:
    """Turn by the tilt of the scan and move to where the part lay."""
    c, s = np.cos(TILT), np.sin(TILT)
    return points @ np.array([[c, s], [-s, c]]) + np.array([40.0, 25.0])


NOSE_HOLE, SLOT_HOLE = ((23.0, 92.0), 9.0), ((59.0, 11.0), 26.0, 4.0)
BOLT_HOLES, BOLT_RADIUS = ((14.0, 11.0), (105.0, 11.0)), 3.3
WINDOW = np.array([[14.0, 26.0], [34.0, 26.0], [34.0, 34.0], [14.0, 34.0]])


# Scanning ------------------------------------------------------------------------------------------------------------


def rasterise(polygon: Points, pitch: float) -> tuple[NDArray[np.bool_], Points]:
    """Pixels whose middle lies in the polygon, rows upwards, and the lower left corner of the raster."""
    corner = np.floor(polygon.min(axis=0) / pitch) * pitch - 2.0 * pitch
    columns, rows = (np.ceil((polygon.max(axis=0) - corner) / pitch) + 2).astype(int)
    x0, y0 = polygon.T
    x1, y1 = np.roll(x0, -1), np.roll(y0, -1)
    middles = corner[0] + (np.arange(columns) + 0.5) * pitch
    image = np.zeros((rows, columns), dtype=np.bool_)
    for row in range(rows):
        y = corner[1] + (row + 0.5) * pitch
        cut = (y0 > y) != (y1 > y)
        crossings = np.sort(x0[cut] + (y - y0[cut]) / (y1[cut] - y0[cut]) * (x1[cut] - x0[cut]))
        image[row] = np.searchsorted(crossings, middles) % 2 == 1
    return image, corner


def outline_of_pixels(image: NDArray[np.bool_]) -> NDArray[np.int64]:
    """Walk along pixel edges around the one blob of the image, blob on the left; only the turning points are kept."""
    padded = np.pad(image, 1)
    ahead: dict[tuple[int, int], list[tuple[int, int]]] = {}
    for (dy, dx), start, end in (
        ((-1, 0), (0, 0), (1, 0)),  # nothing below: the lower edge is walked to the east
        ((0, 1), (1, 0), (1, 1)),
        ((1, 0), (1, 1), (0, 1)),
        ((0, -1), (0, 1), (0, 0)),
    ):
        bare = padded & ~np.roll(padded, (-dy, -dx), axis=(0, 1))
        for y, x in np.argwhere(bare).tolist():
            ahead.setdefault((x + start[0], y + start[1]), []).append((x + end[0], y + end[1]))
    here = first = min(ahead)
    way, walk = (0, 0), []
    while True:
        choices = ahead[here]
        # where two pixels touch by a corner the walk turns left: it stays with its own pixel
        there = max(choices, key=lambda p: way[0] * (p[1] - here[1]) - way[1] * (p[0] - here[0]))
        choices.remove(there)
        step = (there[0] - here[0], there[1] - here[1])
        if step != way:
            walk.append(here)
        here, way = there, step
        if here == first:
            return np.array(walk, dtype=np.int64) - 1


def scanned(polygon: Points) -> Points:
    """The staircase that a trace of the scanned shape gives, millimetres."""
    image, corner = rasterise(laid(polygon), PITCH)
    return np.round(corner + outline_of_pixels(image) * PITCH, 6)


def digitised(path: Points, rng: np.random.Generator, step: tuple[float, float], noise: float, closed: bool) -> Points:
    """Points picked by hand along a path: uneven steps, noise in both coordinates."""
    whole = np.vstack([path, path[:1]]) if closed else path
    along = np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(whole, axis=0), axis=1))])
    stops = np.cumsum(rng.uniform(*step, size=int(2 * along[-1] / step[0])))
    stops = stops[stops < along[-1] - 0.5 * step[0]]
    stops = np.concatenate([[0.0], stops] if closed else [[0.0], stops, along[-1:]])
    picked = np.stack([np.interp(stops, along, column) for column in whole.T], axis=1)
    return np.round(picked + rng.normal(0.0, noise, picked.shape), 3)


# Drawings ------------------------------------------------------------------------------------------------------------


def new_drawing(**layers: int) -> Drawing:
    """A drawing in millimetres with the given layers and colours."""
    drawing = ezdxf.new("R2010", setup=True, units=units.MM)
    for name, colour in layers.items():
        drawing.layers.add(name, color=colour)
    return drawing


def add_notes(drawing: Drawing, lines: list[str], at: tuple[float, float], height: float) -> None:
    """Lines of text, one under the other."""
    for number, line in enumerate(lines):
        text = drawing.modelspace().add_text(line, height=height, dxfattribs={"layer": "Notes"})
        text.set_placement((at[0], at[1] - 1.6 * number * height))


def add_size(drawing: Drawing, start: Points, end: Points, distance: float) -> None:
    """A dimension between two points, its line that far to their left."""
    start, end = (np.round(p, 6).tolist() for p in (start, end))
    drawing.modelspace().add_aligned_dim(start, end, distance, dxfattribs={"layer": "Sizes"}).render()


def bracket() -> Drawing:
    """The scanned bracket."""
    drawing = new_drawing(Scan=7, Drilled=5, Notes=3, Sizes=2)
    space = drawing.modelspace()
    (nose, radius), slotted = NOSE_HOLE, slot(*SLOT_HOLE)
    for shape in (bracket_outline(), arc(nose, radius, 0.0, 360.0)[:-1], slotted):
        space.add_lwpolyline(scanned(shape), close=True, dxfattribs={"layer": "Scan"})
    for centre in laid(np.array(BOLT_HOLES)).round(6).tolist():
        space.add_circle(centre, BOLT_RADIUS, dxfattribs={"layer": "Drilled"})
    space.add_lwpolyline(laid(WINDOW).round(6), close=True, dxfattribs={"layer": "Drilled"})
    add_notes(
        drawing, ["QUERN & THOLE  stove no. 2", "hinge bracket, 4 mm plate", "scan 0.25 mm a pixel"], (150, 130), 4
    )
    add_size(drawing, *laid(np.array([[0.0, 0.0], [118.0, 0.0]])), -12.0)
    add_size(drawing, *laid(np.array([[0.0, 0.0], [0.0, 40.0]])), 12.0)
    return drawing


def bracket_rev_b() -> Drawing:
    """The revised bracket: foot 2 mm longer, nose hole 0.5 mm larger in radius, one bolt hole 1 mm further out."""
    drawing = new_drawing(Outline=7, Drilled=5, Notes=3)
    space = drawing.modelspace()
    (nose, radius), slotted = NOSE_HOLE, slot(*SLOT_HOLE)
    for shape in (bracket_outline(120.0), slotted, WINDOW):
        space.add_lwpolyline(laid(shape).round(6), close=True, dxfattribs={"layer": "Outline"})
    holes = [(nose, radius + 0.5), (BOLT_HOLES[0], BOLT_RADIUS), ((106.0, 11.0), BOLT_RADIUS)]
    for centre, size in holes:
        space.add_circle(laid(np.array([centre]))[0].round(6).tolist(), size, dxfattribs={"layer": "Drilled"})
    add_notes(drawing, ["QUERN & THOLE  stove no. 2", "hinge bracket, revision B"], (150, 130), 4)
    return drawing


def skiff_template() -> Drawing:
    """Hand-digitised templates of a rowing skiff: a frame (closed, four corners), its stem and a batten (both open)."""
    rng = np.random.default_rng(20_231)
    drawing = new_drawing(Frames=4, Stem=6, Notes=3)
    space = drawing.modelspace()
    outer = cubic((0.0, 0.0), (260.0, 5.0), (520.0, 60.0), (560.0, 330.0))
    inner = cubic((515.0, 330.0), (480.0, 100.0), (250.0, 52.0), (0.0, 48.0))
    frame = digitised(np.vstack([outer, inner]), rng, (4.0, 11.0), 0.35, True)
    space.add_lwpolyline(frame, close=True, dxfattribs={"layer": "Frames"})
    stem = np.array([700.0, 0.0]) + cubic((0.0, 10.0), (140.0, 10.0), (205.0, 120.0), (240.0, 360.0))
    space.add_polyline2d(digitised(stem, rng, (5.0, 14.0), 0.35, False).tolist(), dxfattribs={"layer": "Stem"})
    batten = np.array([0.0, 430.0]) + np.vstack(
        [cubic((0, 0), (180, 90), (330, 90), (480, 20)), cubic((480, 20), (600, -36), (760, -40), (940, 0))[1:]]
    )
    space.add_lwpolyline(digitised(batten, rng, (6.0, 16.0), 0.35, False), dxfattribs={"layer": "Frames"})
    add_notes(
        drawing, ["QUERN & THOLE  skiff Dabchick", "frame 3, stem, sheer batten", "picked off paper"], (600, 330), 14
    )
    return drawing


def exploded_plate() -> Drawing:
    """A clock-like trivet plate, drawn once with arcs and then exploded into lines in no order or direction."""
    rng = np.random.default_rng(12)
    drawing = new_drawing(Plate=1, Notes=3)
    loops = [arc((0.0, 0.0), 12.0, 0.0, 360.0)[:-1:12]]
    rim = []
    for hour in range(12):
        middle = 30.0 * hour
        rim += [
            arc((0.0, 0.0), 80.0, middle - 12.0, middle + 12.0)[::12],
            arc((0.0, 0.0), 74.0, middle + 13, middle + 17)[::8],
        ]
        c, s = np.cos(np.radians(middle)), np.sin(np.radians(middle))
        mark = slot((55.0, 0.0), 18.0 if hour % 3 == 0 else 9.0, 2.5)[::6]
        loops.append(mark @ np.array([[c, s], [-s, c]]))
    loops.append(np.vstack(rim))
    lines = [np.stack([loop, np.roll(loop, -1, axis=0)], axis=1) for loop in (np.round(loop, 4) for loop in loops)]
    every = rng.permutation(np.vstack(lines))
    flip = rng.random(len(every)) < 0.5
    every[flip] = every[flip, ::-1]
    for start, end in every.tolist():
        drawing.modelspace().add_line(start, end, dxfattribs={"layer": "Plate"})
    add_notes(drawing, ["QUERN & THOLE  trivet plate", "exploded on export"], (90, 80), 6)
    return drawing


def stem_stations() -> str:
    """Stations of the skiff's stem line as a table; the foot of the stem is a knuckle."""
    keel = np.stack([np.linspace(0.0, 600.0, 5), 12.0 + 18.0 * np.linspace(0.0, 1.0, 5) ** 2], axis=1)
    rise = cubic((600.0, 30.0), (650.0, 70.0), (720.0, 200.0), (745.0, 420.0), count=10)[1:]
    rows = [
        f"{x:.1f},{y:.1f},{'yes' if i == len(keel) - 1 else ''}" for i, (x, y) in enumerate(np.vstack([keel, rise]))
    ]
    head = ["# QUERN & THOLE  skiff Dabchick: stem line, invented", "# units: mm", "x,y,corner"]
    return "\n".join([*head, *rows]) + "\n"


def write(folder: Path) -> None:
    """Write every sample into a folder."""
    before, ezdxf.options.write_fixed_meta_data_for_testing = ezdxf.options.write_fixed_meta_data_for_testing, True
    try:  # fixed dates and identifiers, so that the files stay the same
        bracket().saveas(folder / "bracket.dxf")
        bracket_rev_b().saveas(folder / "bracket-rev-b.dxf")
        skiff_template().saveas(folder / "skiff-template.dxf")
        exploded_plate().saveas(folder / "exploded.dxf")
    finally:
        ezdxf.options.write_fixed_meta_data_for_testing = before
    (folder / "stem-stations.csv").write_text(stem_stations(), encoding="utf-8", newline="\n")


if __name__ == "__main__":
    write(Path(sys.argv[1]) if len(sys.argv) > 1 else Path(__file__).parent)
