"""Drawings: the profiles in a DXF document, and the document itself, which nothing else changes."""

from converter.drawing.add import add_curve, new_drawing
from converter.drawing.model import PLAN, AnyCurve, Drawing, Frame, NearGap, Profile, Skipped
from converter.drawing.read import GAP_SHARE, read_drawing
from converter.drawing.save import save
from converter.drawing.write import Written, replace, supports, written_curve

__all__ = [
    "GAP_SHARE",
    "PLAN",
    "AnyCurve",
    "Drawing",
    "Frame",
    "NearGap",
    "Profile",
    "Skipped",
    "Written",
    "add_curve",
    "new_drawing",
    "read_drawing",
    "replace",
    "save",
    "supports",
    "written_curve",
]
