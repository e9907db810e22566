"""Support polygons and how safely a point lies over them; m, ground plane; no state.

Margins are signed: positive inside the polygon, negative outside.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

from hobnail.motion.schedule import intervals
from hobnail.robot import Vec2


def convex_hull(points: Sequence[Vec2]) -> list[Vec2]:
    """Corners of the convex hull, counter-clockwise (Andrew's monotone chain, 1979)."""
    ordered = sorted(set(points))
    if len(ordered) < 3:
        return ordered
    return _half_hull(ordered)[:-1] + _half_hull(ordered[::-1])[:-1]


def _half_hull(points: Sequence[Vec2]) -> list[Vec2]:
    chain: list[Vec2] = []
    for x, y in points:
        while len(chain) >= 2:
            (x0, y0), (x1, y1) = chain[-2], chain[-1]
            if (x1 - x0) * (y - y0) - (y1 - y0) * (x - x0) > 0.0:
                break
            chain.pop()
        chain.append((x, y))
    return chain


def stability_margin(feet: Sequence[Vec2], point: Vec2) -> float:
    """Shortest distance (m) from a point to the border of the feet's support polygon,
    negative outside of it (McGhee & Frank 1968; memory).  -inf without feet."""
    hull = convex_hull(feet)
    if len(hull) < 3:
        return -min(
            (_distance(point, a, b) for a, b in zip(hull, hull[1:] or hull, strict=False)), default=math.inf
        )
    inside = math.inf
    nearest = math.inf
    for (ax, ay), (bx, by) in zip(hull, [*hull[1:], hull[0]], strict=True):
        length = math.hypot(bx - ax, by - ay)
        side = ((bx - ax) * (point[1] - ay) - (by - ay) * (point[0] - ax)) / length
        inside = min(inside, side)
        nearest = min(nearest, _distance(point, (ax, ay), (bx, by)))
    return inside if inside >= 0.0 else -nearest


def _distance(point: Vec2, a: Vec2, b: Vec2) -> float:
    abx, aby = b[0] - a[0], b[1] - a[1]
    length2 = abx * abx + aby * aby
    along = 0.0
    if length2 > 0.0:
        along = ((point[0] - a[0]) * abx + (point[1] - a[1]) * aby) / length2
        along = max(0.0, min(1.0, along))
    return math.hypot(point[0] - a[0] - along * abx, point[1] - a[1] - along * aby)


def longitudinal_margin(feet: Sequence[Vec2], point: Vec2) -> float:
    """Shorter of the distances (m) from a point, along x, to the front and the rear border
    of the support polygon; negative when the line through it misses the polygon or
    the point lies before or behind it (McGhee & Frank 1968; memory)."""
    hull = convex_hull(feet)
    crossings = []
    for (ax, ay), (bx, by) in zip(hull, [*hull[1:], *hull[:1]], strict=True):
        low, high = min(ay, by), max(ay, by)
        if low <= point[1] <= high:
            if ay == by:
                crossings += [ax, bx]
            else:
                crossings.append(ax + (bx - ax) * (point[1] - ay) / (by - ay))
    if not crossings:
        return -math.inf
    return min(max(crossings) - point[0], point[0] - min(crossings))


def support_centre(feet: Sequence[Vec2], duty: float, phases: Sequence[float]) -> Vec2:
    """The point that lies best over the supports of a whole cycle.

    Least squares over the cycle: near the line of a two-foot support, near the
    centroid of a larger one.  For a trot it is where the diagonals cross.
    """
    # Normal equations of the rows n . c = n . p, with a faint pull to the centroid of all
    # feet so that one support line alone still has an answer.
    everyone = _centroid(feet)
    a11 = a22 = 1e-6
    a12 = 0.0
    b1, b2 = 1e-6 * everyone[0], 1e-6 * everyone[1]
    for _, length, down in intervals(duty, phases):
        standing = [foot for foot, is_down in zip(feet, down, strict=True) if is_down]
        if len(standing) == 2:
            (x0, y0), (x1, y1) = standing
            size = math.hypot(x1 - x0, y1 - y0)
            rows = [((y0 - y1) / size, (x1 - x0) / size, standing[0], length)]
        elif standing:
            centre = _centroid(standing)
            rows = [(1.0, 0.0, centre, 0.1 * length), (0.0, 1.0, centre, 0.1 * length)]
        else:
            rows = []
        for nx, ny, (px, py), weight in rows:
            along = nx * px + ny * py
            a11 += weight * nx * nx
            a12 += weight * nx * ny
            a22 += weight * ny * ny
            b1 += weight * nx * along
            b2 += weight * ny * along
    det = a11 * a22 - a12 * a12
    return (a22 * b1 - a12 * b2) / det, (a11 * b2 - a12 * b1) / det


def _centroid(points: Sequence[Vec2]) -> Vec2:
    return sum(x for x, _ in points) / len(points), sum(y for _, y in points) / len(points)
