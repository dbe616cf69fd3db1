"""The upper hull of points in the plane: the smallest concave curve on or above them."""

from __future__ import annotations

from collections.abc import Iterable
from itertools import pairwise

Point = tuple[float, float]

TOLERANCE = 1e-9
"""Shares of a rating closer than this are the same."""


def upper_hull(points: Iterable[Point]) -> tuple[Point, ...]:
    """Corners of the upper hull, ascending; points on a straight edge are left out.

    Parameters
    ----------
    points : (z, b) pairs in any order; of points with equal z the highest counts

    Returns
    -------
    tuple of points with strictly falling slopes between them (Andrew's monotone chain)

    >>> upper_hull([(-1.0, -1.25), (0.0, 0.0), (0.5, 0.3), (1.0, 0.8)])
    ((-1.0, -1.25), (0.0, 0.0), (1.0, 0.8))
    """
    highest: dict[float, float] = {}
    for z, b in points:
        highest[z] = max(b, highest.get(z, b))
    hull: list[Point] = []
    for z, b in sorted(highest.items()):
        while len(hull) >= 2 and _turn(hull[-2], hull[-1], (z, b)) >= -TOLERANCE:
            hull.pop()
        hull.append((z, b))
    return tuple(hull)


def points_below_hull(points: Iterable[Point]) -> tuple[Point, ...]:
    """The points that lie clearly below the upper hull of them all, in the given order."""
    points = list(points)
    hull = upper_hull(points)
    below = []
    for z, b in points:
        for (z0, b0), (z1, b1) in pairwise(hull):
            if z0 <= z <= z1 and b < b0 + (b1 - b0) * (z - z0) / (z1 - z0) - TOLERANCE:
                below.append((z, b))
                break
    return tuple(below)


def _turn(a: Point, b: Point, c: Point) -> float:
    """Above 0 where the way from a over b to c turns left, so that b lies below a to c."""
    return (b[0] - a[0]) * (c[1] - a[1]) - (b[1] - a[1]) * (c[0] - a[0])
