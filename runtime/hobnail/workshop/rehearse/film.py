"""A film of a rehearsal: side view and top view as line drawings, an animated GIF or WebP; no GPU.

Legs are drawn from the physics' joint angles by the leg's kinematics; a foot
that carries is drawn full, one in the air hollow.  The camera follows the
robot; marks on the floor every 50 mm show its way.
"""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from hobnail.errors import CommandError, DriverUnavailableError
from hobnail.motion.leg import LegKinematics
from hobnail.workshop.rehearse.runner import Recording

FRAMES_PER_S = 25
SIZE = (720, 600)  # pixels: the side view above, the top view below
SPLIT = 330
FORMATS = (".gif", ".webp")
_INK, _FAINT, _GROUND = (30, 30, 30), (190, 190, 190), (120, 100, 80)
_COLOURS = ((200, 60, 40), (40, 90, 190), (220, 150, 30), (40, 140, 90), (130, 60, 160), (60, 150, 160))
_MARK_M = 0.05
_LOADED_N = 0.3

Floats = npt.NDArray[np.float64]


def film(recording: Recording, path: str | Path) -> int:
    """Write the film in real time; the number of its frames.

    Raises CommandError for another ending than .gif or .webp, DriverUnavailableError when
    pillow is not installed, OSError when the file cannot be written.
    """
    path = check_name(path)
    every = max(1, round(1.0 / (FRAMES_PER_S * recording.robot.period_s)))
    frames = [frame(recording, index) for index in range(0, len(recording.time_s), every)]
    shown_ms = round(1000 * every * recording.robot.period_s)
    frames[0].save(path, save_all=True, append_images=frames[1:], duration=shown_ms, loop=0)
    return len(frames)


def check_name(path: str | Path) -> Path:
    """The path, if a film can be written under that name; raises as `film` does."""
    path = Path(path)
    if path.suffix.lower() not in FORMATS:
        raise CommandError(f"film is {path.name!r}; allowed: a name that ends in {' or '.join(FORMATS)}")
    _pillow()
    return path


def frame(recording: Recording, index: int) -> Any:
    """One picture (a PIL image) of tick `index`."""
    image_module, draw_module = _pillow()
    picture = image_module.new("RGB", SIZE, (255, 255, 255))
    draw = draw_module.Draw(picture)
    r = recording
    heading = math.atan2(float(r.true_rotation[index, 1, 0]), float(r.true_rotation[index, 0, 0]))
    c, s = math.cos(heading), math.sin(heading)
    position = r.true_position_m[index]
    # The side view looks at the robot's own right side, however it has turned.
    turned = np.array([[c, s, 0.0], [-s, c, 0.0], [0.0, 0.0, 1.0]])
    scale, small = _pixels_per_m(r)
    side = _View(centre=(0.0, 0.45 * SPLIT / scale), origin=(SIZE[0] / 2, SPLIT / 2), scale=scale)
    top = _View(
        centre=(float(position[0]), float(position[1])),
        origin=(SIZE[0] / 2, SPLIT + (SIZE[1] - SPLIT) / 2),
        scale=small,
    )
    _floor(draw, side, top, _way_ahead_m(r, index))
    trunk = _trunk(r, position, r.true_rotation[index])
    _polygon(draw, top, trunk[:, :2])
    _polygon(draw, side, ((trunk - (*position[:2], 0.0)) @ turned.T)[:, (0, 2)])
    for leg, colour in zip(range(len(r.robot.legs)), _COLOURS * 4, strict=False):
        points = np.array(_leg_points(r, index, leg))
        loaded = r.foot_force_n[index, leg] > _LOADED_N
        beside = (points - (*position[:2], 0.0)) @ turned.T
        for view, flat in ((top, points[:, :2]), (side, beside[:, (0, 2)])):
            draw.line([view.at(*point) for point in flat], fill=colour, width=3)
            x, y = view.at(*flat[-1])
            size = max(3.0, r.robot.legs[leg].foot_radius_m * view.scale)
            draw.ellipse(
                (x - size, y - size, x + size, y + size), outline=colour, fill=colour if loaded else None
            )
    draw.rectangle((0, 0, SIZE[0], 36), fill=(255, 255, 255))
    _caption(draw, r, index)
    return picture


class _View:
    """From metres to pixels; up is up."""

    def __init__(self, *, centre: tuple[float, float], origin: tuple[float, float], scale: float) -> None:
        self.centre, self.origin, self.scale = centre, origin, scale

    def at(self, x_m: float, y_m: float) -> tuple[float, float]:
        """The pixel of a point."""
        return (
            self.origin[0] + (x_m - self.centre[0]) * self.scale,
            self.origin[1] - (y_m - self.centre[1]) * self.scale,
        )


def _pillow() -> tuple[Any, Any]:
    try:
        from PIL import Image, ImageDraw
    except ImportError as error:
        raise DriverUnavailableError("reports and films need: pip install 'hobnail[reports]'") from error
    return Image, ImageDraw


def _pixels_per_m(r: Recording) -> tuple[float, float]:
    """Scales at which the stretched robot fits into the side view, and turned into the top view."""
    reach = max(leg.upper_m + leg.lower_m for leg in r.robot.legs)
    length, width, height = r.robot.body.size_m
    scale = min(0.85 * SIZE[0] / (length + 2 * reach), 0.75 * SPLIT / (reach + height))
    across = math.hypot(length, width) + reach
    return scale, min(scale, 0.9 * (SIZE[1] - SPLIT) / across)


def _way_ahead_m(r: Recording, index: int) -> float:
    """How far the robot has gone ahead, along its own heading, up to a tick."""
    steps = np.diff(r.true_position_m[: index + 1, :2], axis=0)
    ahead = r.true_rotation[1 : index + 1, :2, 0]
    return float(np.sum(steps * ahead))


def _trunk(r: Recording, position: Floats, rotation: Floats) -> Floats:
    """The eight corners of the trunk, world frame, (8, 3)."""
    length, width, height = r.robot.body.size_m
    low = -r.robot.body.belly_m
    corners = np.array(
        [
            (sx * length / 2, sy * width / 2, z)
            for sx in (-1, 1)
            for sy in (-1, 1)
            for z in (low, low + height)
        ]
    )
    placed: Floats = position + corners @ rotation.T
    return placed


def _polygon(draw: Any, view: _View, points: Floats) -> None:
    draw.polygon([view.at(p[0], p[1]) for p in _outline(points)], outline=_INK, width=2)


def _outline(points: Floats) -> list[Floats]:
    """Convex outline of points in a plane (gift wrapping: eight points need no better)."""
    start = min(range(len(points)), key=lambda i: (points[i][0], points[i][1]))
    outline, at = [], start
    while True:
        outline.append(points[at])
        best = (at + 1) % len(points)
        for other in range(len(points)):
            a, b = points[best] - points[at], points[other] - points[at]
            cross = a[0] * b[1] - a[1] * b[0]
            if best == at or cross < 0 or (cross == 0 and b @ b > a @ a):
                best = other
        at = best
        if at == start or len(outline) > len(points):
            return outline


def _leg_points(r: Recording, index: int, leg: int) -> list[Floats]:
    """Hip, hip pitch axis, knee and foot, world frame."""
    parts = r.robot.legs[leg]
    roll, hip, knee = (float(angle) for angle in r.true_joints_rad[index, 3 * leg : 3 * leg + 3])
    kinematics = LegKinematics(parts)
    c, s = math.cos(roll), math.sin(roll)
    chain = [
        (0.0, 0.0, 0.0),
        (0.0, parts.abduction_m * c, parts.abduction_m * s),
        kinematics.knee_point(roll, hip),
        kinematics.foot(roll, hip, knee),
    ]
    position, rotation = r.true_position_m[index], r.true_rotation[index]
    return [position + rotation @ (np.array(parts.hip_m) + np.array(point)) for point in chain]


def _floor(draw: Any, side: _View, top: _View, way_m: float) -> None:
    draw.line([(0, SPLIT), (SIZE[0], SPLIT)], fill=_FAINT)
    _, ground = side.at(0.0, 0.0)
    draw.line([(0, ground), (SIZE[0], ground)], fill=_GROUND, width=2)
    for mark in _marks(way_m, SIZE[0] / side.scale, _MARK_M):
        x, _ = side.at(mark * _MARK_M - way_m, 0.0)
        draw.line([(x, ground), (x, ground + (12 if mark % 5 == 0 else 6))], fill=_GROUND)
    for mark in _marks(top.centre[0], SIZE[0] / top.scale, 5 * _MARK_M):
        x, _ = top.at(mark * 5 * _MARK_M, 0.0)
        draw.line([(x, SPLIT + 1), (x, SIZE[1])], fill=_FAINT)
    for mark in _marks(top.centre[1], (SIZE[1] - SPLIT) / top.scale, 5 * _MARK_M):
        _, y = top.at(0.0, mark * 5 * _MARK_M)
        if y > SPLIT:
            draw.line([(0, y), (SIZE[0], y)], fill=_FAINT)


def _marks(centre_m: float, span_m: float, every_m: float) -> range:
    """Numbers of the marks within a span about a centre."""
    first = math.floor((centre_m - span_m / 2) / every_m)
    return range(first, first + math.ceil(span_m / every_m) + 2)


def _caption(draw: Any, r: Recording, index: int) -> None:
    vx, vy, turn = r.command[index]
    rotation = r.true_rotation[index]
    tilt = math.degrees(math.acos(min(1.0, float(rotation[2, 2]))))
    text = (
        f"{r.robot.name}, {r.scenario.name}   {r.time_s[index]:5.2f} s   {r.state[index]}, {r.gait[index]}\n"
        f"asked for {vx:+.2f}, {vy:+.2f} m/s, {math.degrees(turn):+.0f} deg/s   "
        f"at {r.true_position_m[index, 0]:+.3f}, {r.true_position_m[index, 1]:+.3f} m   tilt {tilt:.1f} deg"
    )
    draw.multiline_text((10, 8), text, fill=_INK)
    draw.text((10, SPLIT - 16), "side view; marks every 50 mm", fill=_GROUND)
    draw.text((10, SPLIT + 6), "from above; lines every 250 mm", fill=_GROUND)
