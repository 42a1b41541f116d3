"""Whether a polyline crosses or touches itself."""

from geometry.polyline import Polyline

__all__ = ["is_simple"]


def is_simple(polyline: Polyline) -> bool:
    """Tell whether a planar polyline is simple: it neither crosses nor touches itself.

    Args:
        polyline: cleaned, 2-D.
    """
    if polyline.closed and len(polyline.points) < 3:
        return False  # there and back

    import shapely

    shape = shapely.linearrings(polyline.points) if polyline.closed else shapely.linestrings(polyline.points)
    return bool(shapely.is_simple(shape))
