"""Processor time of the maps of two outlines of 100,000 vertices, as shares of the time the comparison takes.

Run: OMP_NUM_THREADS=1 python -m tests.benchmarks.maps
"""

import tempfile
import time
from pathlib import Path

import numpy as np

from converter.maps.drawing import write_map
from converter.maps.table import write_table
from converter.pages.compare import write_page
from geometry.polyline import Polyline
from tests.comparisons import LIMITS, comparison_of


def outline(seed, bump):
    """A traced outline of a thousand across, with jaggedness and a bump."""
    t = np.linspace(0.0, 2.0 * np.pi, 100_000, endpoint=False)
    radius = 500.0 + 100.0 * np.sin(3.0 * t) + 25.0 * np.sin(17.0 * t) + bump * np.exp(-(((t - 2.0) / 0.05) ** 2))
    points = np.stack([radius * np.cos(t), radius * np.sin(t)], axis=1)
    return Polyline(points + np.random.default_rng(seed).normal(scale=0.01, size=points.shape), True)


def main():
    begin = time.process_time()
    comparison = comparison_of([(outline(1, 0.0), outline(2, 0.4))], LIMITS)
    compared = time.process_time() - begin
    print(f"comparison: {len(comparison.pairs[0].course.along)} samples, {len(comparison.record.pairs[0].zones)} zones")
    with tempfile.TemporaryDirectory() as folder:
        for name, write in (("map.dxf", write_map), ("map.csv", write_table), ("map.html", write_page)):
            path = Path(folder) / name
            begin = time.process_time()
            write(comparison, path)
            share = (time.process_time() - begin) / compared
            print(f"{name:9} {share:5.2f} of the comparison's time, {path.stat().st_size / 1e6:6.2f} MB")


if __name__ == "__main__":
    main()
