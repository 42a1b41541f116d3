"""Measure what reading, joining and writing cost beside the drawing library's own share.

Run from the project folder: python -m tests.benchmarks.reading [segments]
"""

import sys
import tempfile
import time
from pathlib import Path

import ezdxf
import numpy as np

from converter.drawing import read_drawing, replace, save
from converter.jobs.inspect import inspect_drawing


def drawings(folder, count):
    """Yield names and files: one long polyline, and the same curve as shuffled separate lines."""
    angle = np.linspace(0.0, 2.0 * np.pi, count, endpoint=False)
    points = (100.0 + 5.0 * np.sin(9.0 * angle))[:, None] * np.stack([np.cos(angle), 0.6 * np.sin(angle)], axis=1)
    doc = ezdxf.new("R2010", units=4)
    values = np.zeros((count, 5))
    values[:, :2] = points
    polyline = doc.modelspace().add_lwpolyline((), close=True)
    polyline.lwpoints.values = values
    doc.saveas(folder / "polyline.dxf")
    yield "one LWPOLYLINE", folder / "polyline.dxf"
    doc = ezdxf.new("R2010", units=4)
    rng = np.random.default_rng(0)
    for i in rng.permutation(count).tolist():
        ends = [points[i].tolist(), points[(i + 1) % count].tolist()]
        doc.modelspace().add_line(*(ends if rng.random() < 0.5 else ends[::-1]))
    doc.saveas(folder / "lines.dxf")
    yield "shuffled LINEs", folder / "lines.dxf"


def seconds(work):
    """Return processor time and the result."""
    start = time.process_time()
    result = work()
    return time.process_time() - start, result


def main():
    """Print a table of processor time."""
    count = int(sys.argv[1]) if len(sys.argv) > 1 else 20_000
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        for title, path in drawings(folder, count):
            library, _ = seconds(lambda path=path: ezdxf.readfile(path))
            ours, drawing = seconds(lambda path=path: read_drawing(path))
            (profile,) = drawing.profiles
            put, _ = seconds(lambda drawing=drawing, profile=profile: replace(drawing, profile, profile.parts[0]))
            saved, _ = seconds(lambda drawing=drawing: save(drawing, folder / "out.dxf", force=True))
            looked, _ = seconds(lambda path=path: inspect_drawing(path))
            print(
                f"{title}, {count} segments: library reads in {library:.2f} s, we in {ours:.2f} s "
                f"({ours / library:.2f} times); replace {put:.2f} s, save {saved:.2f} s, inspect {looked:.2f} s"
            )


if __name__ == "__main__":
    main()
