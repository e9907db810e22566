"""What a robot truly walks when its feet make a motion, and back: a linear map of twists; m, rad, s.

Pure.  Soft feet, slipping floors and horns a little out make a robot go a few per
cent too far or too short and veer; `robot.WalkResponse` has what measured walks
gave.  Feet and limits stay in terms of the motion that the feet make; commands
come in, and odometry goes out, in terms of the true one.
"""

from __future__ import annotations

from math import tan

from hobnail.motion.planar import Pose, Twist, compose, exp_twist
from hobnail.robot import WalkResponse

AS_MADE = WalkResponse()


def log_pose(pose: Pose) -> Twist:
    """The twist that, held for a second, leads from the origin to a pose less than a whole turn away:
    the inverse of `exp_twist`."""
    x, y, yaw = pose
    half = 0.5 * yaw
    k = half / tan(half) if half else 1.0
    return k * x + half * y, k * y - half * x, yaw


def true_twist(response: WalkResponse, feet: Twist) -> Twist:
    """What truly happens when the feet make a twist."""
    vx, vy, yaw_rate = feet
    ahead, sideways = response.ahead, response.sideways
    return (
        ahead[0] * vx + sideways[0] * vy,
        ahead[1] * vx + sideways[1] * vy,
        ahead[2] * vx + sideways[2] * vy + response.turn * yaw_rate,
    )


def feet_twist(response: WalkResponse, wanted: Twist) -> Twist:
    """What the feet must make for a twist to happen; the inverse of `true_twist`.

    Exact for any response within the bounds of a calibration file.
    """
    x, y, yaw_rate = wanted
    ahead, sideways = response.ahead, response.sideways
    determinant = ahead[0] * sideways[1] - ahead[1] * sideways[0]
    vx = (sideways[1] * x - sideways[0] * y) / determinant
    vy = (ahead[0] * y - ahead[1] * x) / determinant
    return vx, vy, (yaw_rate - ahead[2] * vx - sideways[2] * vy) / response.turn


class TrueOdometry:
    """Where the body truly is, from where its feet would have carried it."""

    def __init__(self, response: WalkResponse) -> None:
        self.response = response
        self._by_feet: Pose = (0.0, 0.0, 0.0)
        self._walked: Pose = (0.0, 0.0, 0.0)

    def pose(self, walked: Pose, body: Pose) -> Pose:
        """The true pose of the body, by the feet's odometry: of the walk, and of the body, which
        shift and posture carry about over standing feet."""
        if walked != self._by_feet:
            step = log_pose(relative(self._by_feet, walked))
            self._walked = compose(self._walked, exp_twist(*true_twist(self.response, step), 1.0))
            self._by_feet = walked
        return compose(self._walked, relative(walked, body))


def relative(a: Pose, b: Pose) -> Pose:
    """The pose `b` in the frame of `a`, both given in one frame."""
    back: Pose = compose((0.0, 0.0, -a[2]), (b[0] - a[0], b[1] - a[1], b[2]))
    return back
