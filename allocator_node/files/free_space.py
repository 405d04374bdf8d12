"""Where on its site a team may be: inside the boundary, outside the keep-out areas."""

from __future__ import annotations

import itertools
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass

import shapely
from shapely import Point, Polygon

from ..team import KeepOut

Disc = tuple[float, float, float]
"""x, y and radius, m."""

SPACING = 2.0
"""Distance of places in a row, m."""

GAP = 0.5
"""Room left between two bodies in a row, m."""

MOST_PLACES = 20_000
"""Places that are looked at before a row counts as full."""


@dataclass(frozen=True)
class FreeSpace:
    """A site's areas, as polygons.

    Attributes:
        boundary: Area no robot may leave; None for an open site.
        keep_out: Name and area of what no robot may enter.
    """

    boundary: Polygon | None = None
    keep_out: tuple[tuple[str, Polygon], ...] = ()

    @classmethod
    def of(
        cls, boundary: Sequence[Sequence[float]] | None, keep_out: Iterable[KeepOut]
    ) -> FreeSpace:
        """Prepare the areas of a site whose polygons are valid."""
        areas = tuple((area.name, Polygon(area.polygon)) for area in keep_out)
        outline = Polygon(boundary) if boundary else None
        for polygon in (outline, *(polygon for _, polygon in areas)):
            if polygon is not None:
                shapely.prepare(polygon)
        return cls(outline, areas)

    def objection(self, x: float, y: float, radius: float = 0.0) -> str | None:
        """Say where a disc must not be; None where it may be.

        Args:
            x: Middle, m.
            y: Middle, m.
            radius: Radius, m; 0 for a point, which may be on an edge.
        """
        point = Point(x, y)
        if self.boundary is not None:
            if not self.boundary.covers(point):
                return "outside the boundary"
            if self.boundary.exterior.distance(point) < radius:
                return "partly outside the boundary"
        for name, polygon in self.keep_out:
            if polygon.contains_properly(point):
                return f"in the keep-out area {name}"
            if polygon.distance(point) < radius:
                return f"partly in the keep-out area {name}"
        return None

    def area_objection(self, corners: Sequence[Sequence[float]]) -> str | None:
        """Say where an area of work must not be; None where it may be."""
        area = Polygon(corners)
        if self.boundary is not None and not self.boundary.covers(area):
            return "partly outside the boundary"
        for name, polygon in self.keep_out:
            if polygon.intersection(area).area > 0:
                return f"partly in the keep-out area {name}"
        return None

    def row(self, radii: Iterable[float], taken: Iterable[Disc]) -> list[Disc | None]:
        """Put discs in rows along x, the first at the lowest corner of the site.

        Args:
            radii: Radius of each disc, m.
            taken: Discs to keep clear of.

        Returns:
            One disc for each radius; None where no place is left.
        """
        taken, places, row = list(taken), self._grid(), []
        for radius in radii:
            free = (
                (x, y, radius)
                for x, y in places
                if not self.objection(x, y, radius)
                and not any(overlap((x, y, radius + GAP), other) for other in taken)
            )
            row.append(next(free, None))
            taken += filter(None, row[-1:])
        return row

    def _grid(self) -> Iterator[tuple[float, float]]:
        """Give places one after the other, row by row."""
        if self.boundary is None:
            along, rows, x0, y0 = MOST_PLACES, MOST_PLACES, 0.0, 0.0
        else:
            x0, y0, x1, y1 = self.boundary.bounds
            along, rows = (int(min(side, 1e9) / SPACING) + 1 for side in (x1 - x0, y1 - y0))
            x0, y0 = x0 + SPACING / 2, y0 + SPACING / 2
        places = (
            (x0 + SPACING * column, y0 + SPACING * line)
            for line in range(rows)
            for column in range(along)
        )
        return itertools.islice(places, MOST_PLACES)


def overlap(one: Disc, other: Disc) -> bool:
    """Tell whether two discs overlap; touching is not overlapping."""
    away2 = (one[0] - other[0]) ** 2 + (one[1] - other[1]) ** 2
    return away2 < (one[2] + other[2]) ** 2
