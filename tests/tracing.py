"""Traced outlines of known shapes, for tests: rasters by shapely, staircases and contours by walking pixel edges."""

import numpy as np
import shapely


def staircase(polygon, pitch=1.0):
    """Closed staircase round the pixels whose middles lie in a polygon (one blob without holes), anticlockwise."""
    low = np.floor(polygon.min(axis=0) / pitch) - 2
    columns, rows = (np.ceil(polygon.max(axis=0) / pitch) - low + 2).astype(int)
    x, y = np.meshgrid(low[0] + np.arange(columns) + 0.5, low[1] + np.arange(rows) + 0.5)
    area = shapely.Polygon(polygon / pitch)
    shapely.prepare(area)
    inside = shapely.contains_xy(area, x, y)
    steps = {}
    for dy, dx, start, end in (
        (-1, 0, (0, 0), (1, 0)),
        (0, 1, (1, 0), (1, 1)),
        (1, 0, (1, 1), (0, 1)),
        (0, -1, (0, 1), (0, 0)),
    ):
        bare = inside & ~np.roll(inside, (-dy, -dx), axis=(0, 1))
        for row, column in np.argwhere(bare).tolist():
            steps.setdefault((column + start[0], row + start[1]), []).append((column + end[0], row + end[1]))
    here = first = min(steps)
    walk, way = [], (0, 0)
    while True:
        walk.append(here)
        options = steps[here]
        there = max(options, key=lambda p: way[0] * (p[1] - here[1]) - way[1] * (p[0] - here[0]))
        options.remove(there)
        here, way = there, (there[0] - here[0], there[1] - here[1])
        if here == first:
            return (np.array(walk) + low) * pitch


def noisy(polygon, spacing, sigma, seed):
    """Points along a closed polygon, uneven steps, normal noise in both coordinates."""
    rng = np.random.default_rng(seed)
    path = np.vstack([polygon, polygon[:1]])
    along = np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(path, axis=0), axis=1))])
    at = np.cumsum(spacing * rng.uniform(0.4, 1.6, int(2 * along[-1] / spacing)))
    at = at[at < along[-1] - 0.5 * spacing]
    picked = np.stack([np.interp(at, along, column) for column in path.T], axis=1)
    return picked + rng.normal(0.0, sigma, picked.shape)


def circle(radius, centre=(0.0, 0.0), count=4000):
    """Dense points of a circle."""
    angle = 2.0 * np.pi * np.arange(count) / count
    return np.asarray(centre) + radius * np.stack([np.cos(angle), np.sin(angle)], axis=1)


def dense(corners, step=0.25):
    """Dense points along a closed polygon."""
    corners = np.asarray(corners, dtype=float)
    out = []
    for start, end in zip(corners, np.roll(corners, -1, axis=0), strict=True):
        count = max(1, int(np.linalg.norm(end - start) / step))
        out.append(start + np.arange(count)[:, None] / count * (end - start))
    return np.concatenate(out)


def turned(points, degrees):
    """Points turned about the origin."""
    c, s = np.cos(np.radians(degrees)), np.sin(np.radians(degrees))
    return points @ np.array([[c, s], [-s, c]])
