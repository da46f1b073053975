"""Exact coverage fractions, by adding up signed areas along the edges of a boundary.

An edge that goes down through a cell covers what lies right of it in that cell, and the full
height that it spans in every cell further right; an edge that goes up takes the same away. So
each edge leaves two numbers in the cells that it passes, and a running sum along each row turns
them into the share of every cell that lies inside: signed-area accumulation, as it is used to
draw the outlines of letters. No cell away from an edge is looked at twice.
"""

import numpy as np
from numpy.typing import NDArray

from service.compiled import compiled

Cells = tuple[NDArray[np.int32], NDArray[np.float64], NDArray[np.int64]]


@compiled
def ring_areas(
    points: NDArray[np.float64], rings: NDArray[np.int64], is_hole: NDArray[np.bool_]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return by ring its area, a hole's below 0, and the sign that makes its edges add to that.

    Parameters
    ----------
    points
        Column and row, float64, shape (points, 2); each ring closed.
    rings
        int64, shape (rings + 1,): ring i owns the points ``rings[i]:rings[i + 1]``.
    is_hole
        Shape (rings,).
    """
    areas = np.empty(len(is_hole))
    signs = np.empty(len(is_hole))
    for ring in range(len(is_hole)):
        first = rings[ring]
        x0, y0 = points[first]
        doubled = 0.0
        for at in range(first, rings[ring + 1] - 1):
            x1, y1 = points[at, 0] - x0, points[at, 1] - y0
            x2, y2 = points[at + 1, 0] - x0, points[at + 1, 1] - y0
            doubled += x1 * y2 - x2 * y1
        # Rows count downwards: a ring of negative area goes down on its left side.
        signs[ring] = -1.0 if doubled >= 0 else 1.0
        areas[ring] = abs(doubled) / 2.0
        if is_hole[ring]:
            signs[ring], areas[ring] = -signs[ring], -areas[ring]
    return areas, signs


@compiled
def _add_line(
    areas: NDArray[np.float64], x1: float, y1: float, x2: float, y2: float, sign: float
) -> None:
    """Add an edge that stays within one row of cells and within the columns of `areas`.

    The edge goes from (x1, y1) to (x2, y2), y within the row; `areas` is that row.
    """
    height = (y2 - y1) * sign
    if x1 > x2:
        x1, x2 = x2, x1
    first, last = int(np.floor(x1)), int(np.floor(x2))
    if first == last:
        inside = height * (1.0 - 0.5 * ((x1 - first) + (x2 - first)))
        areas[first] += inside
        areas[first + 1] += height - inside
        return
    slope = height / (x2 - x1)
    part = slope * (first + 1 - x1)
    inside = part * 0.5 * (first + 1 - x1)
    areas[first] += inside
    areas[first + 1] += part - inside
    for col in range(first + 1, last):
        areas[col] += 0.5 * slope
        areas[col + 1] += 0.5 * slope
    part = slope * (x2 - last)
    inside = part * (1.0 - 0.5 * (x2 - last))
    areas[last] += inside
    areas[last + 1] += part - inside


@compiled
def _add_across(
    areas: NDArray[np.float64], x1: float, y1: float, x2: float, y2: float, sign: float
) -> None:
    """Add an edge within one row; what is left or right of the columns is moved to their rim.

    Left of them an edge covers every column in full, right of them none.
    """
    width = len(areas) - 2.0
    if x1 >= 0.0 and x2 >= 0.0 and x1 <= width and x2 <= width:
        _add_line(areas, x1, y1, x2, y2, sign)
        return
    # Cut where the edge meets the rims; between cuts it is on one side.
    xs = np.empty(4)
    ys = np.empty(4)
    xs[0], ys[0] = x1, y1
    count = 1
    rims = (0.0, width) if x1 < x2 else (width, 0.0)
    for rim in rims:
        if (x1 - rim) * (x2 - rim) < 0.0:
            xs[count] = rim
            ys[count] = y1 + (y2 - y1) * ((rim - x1) / (x2 - x1))
            count += 1
    xs[count], ys[count] = x2, y2
    for at in range(count):
        left = min(max(xs[at], 0.0), width)
        right = min(max(xs[at + 1], 0.0), width)
        _add_line(areas, left, ys[at], right, ys[at + 1], sign)


@compiled
def _add_edge(
    areas: NDArray[np.float64], x1: float, y1: float, x2: float, y2: float, sign: float
) -> None:
    """Add an edge, row by row, to `areas` of shape (rows, columns + 2) that begin at (0, 0)."""
    if y1 > y2:
        # Downwards, so that an edge shared by two boundaries is cut at the same places.
        x1, y1, x2, y2, sign = x2, y2, x1, y1, -sign
    rows = len(areas)
    if y1 == y2 or y2 <= 0.0 or y1 >= rows:
        return
    slope = (x2 - x1) / (y2 - y1)
    first = max(int(np.floor(y1)), 0)
    last = min(int(np.ceil(y2)), rows)
    for row in range(first, last):
        # Each place from the nearer end, and never beyond the ends by rounding.
        top, bottom = max(y1, float(row)), min(y2, row + 1.0)
        left = x1 if top == y1 else min(max(x1 + (top - y1) * slope, min(x1, x2)), max(x1, x2))
        right = (
            x2 if bottom == y2 else min(max(x1 + (bottom - y1) * slope, min(x1, x2)), max(x1, x2))
        )
        _add_across(areas[row], left, top, right, bottom, sign)


@compiled
def covered(
    points: NDArray[np.float64],
    rings: NDArray[np.int64],
    signs: NDArray[np.float64],
    zone_rings: NDArray[np.int64],
    windows: NDArray[np.int64],
    grid_cols: int,
    least: float,
    steps: float,
) -> Cells:
    """Return which cells some zones cover, and by what share.

    Parameters
    ----------
    points, rings
        As in `ring_areas`; signs as it gives them.
    zone_rings
        int64, shape (zones, 2): the first ring of each zone and the one after its last.
    windows
        int64, shape (zones, 4): the rows and columns to look at, ``row0, row1, col0, col1``,
        half-open and on the grid. What lies outside is left out.
    grid_cols
        Columns of the grid.
    least
        Smaller shares are left out.
    steps
        Shares are rounded to whole multiples of one part in so many; not at all if it is 0.

    Returns
    -------
    tuple
        Flat row-major cells, int32, ascending within a zone; their shares, float64; and how
        many each zone has, int64.
    """
    room = 0
    largest = 0
    for zone in range(len(windows)):
        row0, row1, col0, col1 = windows[zone]
        room += (row1 - row0) * (col1 - col0)
        largest = max(largest, (row1 - row0) * (col1 - col0 + 2))
    cells = np.empty(room, np.int32)
    shares = np.empty(room, np.float64)
    counts = np.zeros(len(windows), np.int64)
    buffer = np.empty(largest, np.float64)
    found = 0
    for zone in range(len(windows)):
        row0, row1, col0, col1 = windows[zone]
        height, width = row1 - row0, col1 - col0
        areas = buffer[: height * (width + 2)].reshape(height, width + 2)
        areas[:] = 0.0
        for ring in range(zone_rings[zone, 0], zone_rings[zone, 1]):
            for at in range(rings[ring], rings[ring + 1] - 1):
                _add_edge(
                    areas,
                    points[at, 0] - col0,
                    points[at, 1] - row0,
                    points[at + 1, 0] - col0,
                    points[at + 1, 1] - row0,
                    signs[ring],
                )
        before = found
        for row in range(height):
            share = 0.0
            flat = (row0 + row) * grid_cols + col0
            for col in range(width):
                share += areas[row, col]
                told = np.rint(share * steps) / steps if steps > 0 else share
                if told >= least:
                    cells[found] = flat + col
                    shares[found] = min(told, 1.0)
                    found += 1
        counts[zone] = found - before
    return cells[:found].copy(), shares[:found].copy(), counts
