"""The upper hull, against points whose hull is plain to see and against an independent library."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.spatial import ConvexHull, QhullError

from xlplan.base.hull import points_below_hull, upper_hull


def test_a_point_below_a_chord_is_left_out() -> None:
    # At 1 the chord from (0, 0) to (2, 2) passes 1, above the point's 0.5.
    assert upper_hull([(2, 2), (0, 0), (1, 0.5)]) == ((0, 0), (2, 2))
    assert points_below_hull([(2, 2), (0, 0), (1, 0.5)]) == ((1, 0.5),)


def test_a_concave_curve_stays_whole() -> None:
    points = ((-1.0, -1.25), (0.0, 0.0), (0.5, 0.48), (1.0, 0.9))
    assert upper_hull(reversed(points)) == points
    assert points_below_hull(points) == ()


def test_points_on_a_straight_edge_are_not_below_it() -> None:
    points = [(0.0, 0.0), (1.0, 1.0), (2.0, 2.0)]
    assert upper_hull(points) == ((0.0, 0.0), (2.0, 2.0))
    assert points_below_hull(points) == ()


@given(
    st.lists(
        st.tuples(st.integers(-50, 50), st.integers(-50, 50)), min_size=4, max_size=20, unique=True
    )
)
def test_the_hull_lies_on_the_convex_hull(points: list[tuple[int, int]]) -> None:
    try:
        reference = ConvexHull(np.array(points, dtype=float))
    except QhullError:
        return  # all on one line
    corners = {tuple(points[i]) for i in reference.vertices}
    hull = upper_hull([(float(z), float(b)) for z, b in points])
    assert set(hull) <= {(float(z), float(b)) for z, b in corners}
    # Every point lies on or below it.
    z, b = zip(*hull, strict=True)
    for point in points:
        assert point[1] <= np.interp(point[0], z, b) + 1e-9


def test_slopes_fall() -> None:
    hull = upper_hull([(0, 0), (1, 3), (2, 4), (3, 4.5), (4, 1)])
    slopes = [(b - a) / (y - x) for (x, a), (y, b) in pairwise(hull)]
    assert slopes == pytest.approx([3, 1, 0.5, -3.5])
