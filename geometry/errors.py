"""Errors of the geometry core: each says what is wrong, where, and what to do."""

__all__ = ["CoincidentNodesError", "GeometryError", "NotFiniteError", "TooFewPointsError"]


class GeometryError(ValueError):
    """Base of every error that the geometry core raises for unusable input."""


class CoincidentNodesError(GeometryError):
    """A node adds no length, so it cannot be given a parameter."""

    def __init__(self, index: int, *point: float) -> None:
        super().__init__(index, *point)  # plain arguments, so the error can cross a process pool
        self.index, self.point = index, point

    def __str__(self) -> str:
        where = ", ".join(f"{value:g}" for value in self.point)
        return f"nodes {self.index} and {self.index + 1} coincide at ({where}); merge them"


class TooFewPointsError(GeometryError):
    """Fewer points than the method needs."""

    def __init__(self, found: int, needed: int) -> None:
        super().__init__(found, needed)
        self.found, self.needed = found, needed

    def __str__(self) -> str:
        return f"{self.found} distinct points where at least {self.needed} are needed; give more points"


class NotFiniteError(GeometryError):
    """A coordinate is not a finite number."""

    def __init__(self, index: int) -> None:
        super().__init__(index)
        self.index = index

    def __str__(self) -> str:
        return f"point {self.index} has a coordinate that is not a finite number; correct or remove it"
