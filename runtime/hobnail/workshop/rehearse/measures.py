"""What a rehearsal says of a walk, in SI units, and whether that is good enough.

Speed and turn rate are measured cycle by cycle over the steady part of each
stretch of constant command: the body's true motion from one touch-down of the
first leg to its next, as the constant twist that would give it (the logarithm of SE(2)),
averaged.  What sways within a cycle cancels out.  Computes only; runs nothing.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
import numpy.typing as npt

from hobnail.robot import Vec3
from hobnail.workshop.rehearse.limits import Limits
from hobnail.workshop.rehearse.runner import Recording

Floats = npt.NDArray[np.float64]
Flags = npt.NDArray[np.bool_]

CARRIED_STATES = frozenset({"standing", "walking"})
LYING_STATES = frozenset({"off", "waking", "resting", "stopped"})
FELL_TILT_RAD = math.radians(40.0)
LYING_M = 0.012  # this near to the rest height the trunk may touch the floor
LEAST_CYCLES = 2
STEADY_SHARE = 0.02  # how near the odometry's velocity must be to where it ends up
LOADED_N = 0.3  # less is not a step on something
MID_SWING = (0.25, 0.75)


@dataclass(frozen=True, slots=True, kw_only=True)
class Stretch:
    """One stretch of constant command: twists are (vx, vy, yaw rate) at the body origin.

    `drift_rad_m` is the heading gained a metre of a straight walk in whatever direction, and
    `sideways_m_m` the way off to the side a metre; both 0 for what turns or does not travel.
    """

    start_s: float
    end_s: float
    gait: str
    cycles: int
    cycle_s: float
    commanded: Vec3
    odometry: Vec3
    true: Vec3
    drift_rad_m: float
    sideways_m_m: float

    @property
    def way_m(self) -> float:
        """Way at the commanded speed."""
        return math.hypot(*self.commanded[:2]) * (self.end_s - self.start_s)

    @property
    def speed_error_m_s(self) -> float:
        """Length of the difference of the velocity vectors."""
        return math.hypot(self.true[0] - self.commanded[0], self.true[1] - self.commanded[1])

    @property
    def turn_error_rad_s(self) -> float:
        """True less commanded yaw rate."""
        return self.true[2] - self.commanded[2]


@dataclass(frozen=True, slots=True, kw_only=True)
class Result:
    """The measures of one rehearsal.

    `tilt_95_rad` and `tilt_peak_rad` are of the trunk against the floor's
    normal, while level posture is asked for.  `slip_m_m`: metres that feet slid
    while loaded, a metre of way, per foot.  `scuffs`: swings in whose middle the foot touched the
    floor, of `swings`.  `peak_load`: largest torque as a share of the servo's stall
    torque.  `energy_j_m` is None for less than 0.1 m of way.  `jolt_m_s2`: root
    mean square of the trunk's acceleration from tick to tick.  `odometry_error_m`,
    `odometry_error_rad`: where the robot ended against where its odometry says.
    """

    scenario: str
    robot: str
    limits: Limits
    fell: bool
    why_fell: str
    stretches: tuple[Stretch, ...]
    tilt_95_rad: float
    tilt_peak_rad: float
    slip_m_m: float
    scuffs: int
    swings: int
    peak_load: float
    peak_torque_nm: float
    mean_torque_nm: float
    energy_j_m: float | None
    mean_power_w: float
    jolt_m_s2: float
    way_m: float
    odometry_error_m: float
    odometry_error_rad: float
    slowest: float
    clamped: int
    out_of_reach: int
    lost_frames: int
    route_failure: str
    faults: tuple[str, ...]

    @property
    def speed_error(self) -> float:
        """Worst speed error of any stretch as a share of its commanded speed (of 0.1 m/s,
        where that is larger, which makes 5 % of it the 5 mm/s of `Limits`)."""
        return max(
            (s.speed_error_m_s / max(math.hypot(*s.commanded[:2]), 0.1) for s in self.stretches), default=0.0
        )

    @property
    def turn_error(self) -> float:
        """Worst turn rate error as a share of the commanded rate (of 0.4 rad/s, where that is larger)."""
        return max(
            (abs(s.turn_error_rad_s) / max(abs(s.commanded[2]), 0.4) for s in self.stretches), default=0.0
        )

    @property
    def drift_rad_m(self) -> float:
        """Worst heading drift of any stretch that travels without turning, rad a metre."""
        return max((abs(s.drift_rad_m) for s in self.stretches), default=0.0)

    def failures(self, limits: Limits | None = None) -> list[str]:
        """What is not good enough (for the scenario's own limits when none are given), each
        as a sentence; empty when the rehearsal passes."""
        limits = limits or self.limits
        told = [f"fell: {self.why_fell}"] if self.fell else []
        if self.route_failure:
            told.append(self.route_failure)
        if self.faults:
            told.append(f"faults: {', '.join(self.faults)}")
        if self.clamped:
            told.append(f"the last clamp acted {self.clamped} times; allowed: never")
        for s in self.stretches:
            speed = math.hypot(*s.commanded[:2])
            allowed = max(limits.error_share * speed, limits.speed_error_m_s)
            if s.speed_error_m_s > allowed:
                told.append(
                    f"speed is ({s.true[0]:.3f}, {s.true[1]:.3f}) m/s for a command of "
                    f"({s.commanded[0]:.3f}, {s.commanded[1]:.3f}) m/s; allowed: off by {allowed:.4f} m/s"
                )
            allowed = max(limits.error_share * abs(s.commanded[2]), limits.turn_error_rad_s)
            if abs(s.turn_error_rad_s) > allowed:
                told.append(
                    f"turn rate is {s.true[2]:.3f} rad/s for a command of {s.commanded[2]:.3f} rad/s; "
                    f"allowed: off by {allowed:.3f} rad/s"
                )
            if abs(s.drift_rad_m) > limits.drift_rad_m and s.way_m >= limits.drift_way_m:
                told.append(
                    f"heading drifts {math.degrees(s.drift_rad_m):.2f} deg a metre; "
                    f"allowed: {math.degrees(limits.drift_rad_m):.2f}"
                )
        if self.tilt_95_rad > limits.tilt_rad:
            told.append(
                f"tilt is {math.degrees(self.tilt_95_rad):.1f} deg at the 95th percentile; "
                f"allowed: {math.degrees(limits.tilt_rad):.1f}"
            )
        return told


def measure(recording: Recording) -> Result:
    """All measures of a recording."""
    r = recording
    fell, why = _fall(r)
    tilt = np.arccos(np.clip(r.true_rotation[:, 2, 2], -1.0, 1.0))
    level = r.powered & ~r.posed & (np.arange(len(tilt)) > 0.3 / r.robot.period_s)
    level &= np.array([state in CARRIED_STATES for state in r.state])
    # Standing still would dilute the tilt of a walk.
    if np.any(level & r.walking):
        level &= r.walking
    tilts = tilt[level] if np.any(level) else np.zeros(1)
    moving = r.walking & r.powered
    dt = r.robot.period_s
    steps = np.hypot(*np.diff(r.true_position_m[:, :2], axis=0).T)
    way = float(_along_cycles(r))
    slip = float(np.sum(r.foot_slip_m_s[moving]) * dt) / len(r.robot.legs)
    scuffs, swings = _scuffs(r)
    energy = float(np.sum(r.power_w[moving]) * dt)
    stall = np.array([joint.servo.torque_nm for joint in r.robot.joints])
    jolts = np.diff(r.true_velocity_m_s, axis=0) / dt
    walked = jolts[moving[1:]] if np.any(moving[1:]) else jolts
    x, y, yaw = _odometry_error(r)
    return Result(
        scenario=r.scenario.name,
        limits=r.scenario.limits,
        robot=r.robot.name,
        fell=fell,
        why_fell=why,
        stretches=tuple(_stretches(r)),
        tilt_95_rad=float(np.percentile(tilts, 95)),
        tilt_peak_rad=float(np.max(tilts)),
        slip_m_m=slip / max(way, 1e-9) if way > 0.1 else slip / max(float(np.sum(steps)), 1e-9),
        scuffs=scuffs,
        swings=swings,
        peak_load=float(np.max(r.peak_torque_nm / stall)),
        peak_torque_nm=float(np.max(r.peak_torque_nm)),
        mean_torque_nm=float(np.mean(np.abs(r.torque_nm[r.powered]))) if np.any(r.powered) else 0.0,
        energy_j_m=energy / way if way > 0.1 else None,
        mean_power_w=float(np.mean(r.power_w[r.powered])) if np.any(r.powered) else 0.0,
        jolt_m_s2=float(np.sqrt(np.mean(np.sum(walked**2, axis=1)))),
        way_m=way,
        odometry_error_m=math.hypot(x, y),
        odometry_error_rad=yaw,
        slowest=float(np.min(r.slowdown)),
        clamped=r.clamped,
        out_of_reach=r.out_of_reach,
        lost_frames=r.lost_frames,
        route_failure=r.route_failure,
        faults=r.faults,
    )


def headings_rad(recording: Recording) -> Floats:
    """True heading, unwrapped, (n,)."""
    rotation = recording.true_rotation
    headings: Floats = np.unwrap(np.arctan2(rotation[:, 1, 0], rotation[:, 0, 0]))
    return headings


def twist_between(start: Floats, end: Floats, time_s: float) -> Vec3:
    """The constant body twist that takes pose `start` to `end` (x, y, unwrapped yaw) in `time_s`.

    The logarithm of SE(2) (Lynch & Park, Modern Robotics, section 3.3.3, planar case).
    """
    dx, dy, turn = end - start
    half = 0.5 * turn
    # Chord in the frame half-way round, stretched to the arc.
    middle = start[2] + half
    stretch = half / math.sin(half) if abs(half) > 1e-9 else 1.0
    forward = math.cos(middle) * dx + math.sin(middle) * dy
    left = -math.sin(middle) * dx + math.cos(middle) * dy
    return stretch * forward / time_s, stretch * left / time_s, turn / time_s


def touch_downs(recording: Recording, leg: int = 0) -> npt.NDArray[np.intp]:
    """Ticks in which the schedule puts `leg` on the ground."""
    down = recording.stance[:, leg]
    return np.flatnonzero(down[1:] & ~down[:-1]) + 1


def _stretches(r: Recording) -> list[Stretch]:
    poses = np.column_stack((r.true_position_m[:, :2], headings_rad(r)))
    beats = touch_downs(r)
    found = []
    edges = np.flatnonzero(
        np.any(np.diff(r.command, axis=0) != 0.0, axis=1)
        | np.array([a != b for a, b in pairwise(r.gait)])
        | (np.diff(r.powered.astype(int)) != 0)
    )
    for start, end in zip([0, *(edges + 1)], [*(edges + 1), len(r.time_s)], strict=True):
        command = r.command[start]
        if not np.any(command) or not r.powered[start]:
            continue
        inside = beats[(beats >= start) & (beats < end)]
        inside = inside[_first_steady(r, inside) :]
        if len(inside) <= LEAST_CYCLES:
            continue
        true, odometry = [], []
        for a, b in pairwise(inside):
            time_s = float(r.time_s[b] - r.time_s[a])
            true.append(twist_between(poses[a], poses[b], time_s))
            odometry.append(np.mean(r.velocity[a:b], axis=0))
        cycle_s = float(r.time_s[inside[-1]] - r.time_s[inside[0]]) / (len(inside) - 1)
        mean = np.mean(true, axis=0)
        speed = math.hypot(command[0], command[1])
        drift = sideways = 0.0
        if speed > 0.02 and not command[2]:
            drift = float(mean[2]) / speed
            sideways = float(command[0] * mean[1] - command[1] * mean[0]) / speed**2
        found.append(
            Stretch(
                start_s=float(r.time_s[inside[0]]),
                end_s=float(r.time_s[inside[-1]]),
                gait=r.gait[start],
                cycles=len(inside) - 1,
                cycle_s=cycle_s,
                commanded=_vec3(command),
                odometry=_vec3(np.mean(odometry, axis=0)),
                true=_vec3(mean),
                drift_rad_m=drift,
                sideways_m_m=sideways,
            )
        )
    return found


def _first_steady(r: Recording, beats: npt.NDArray[np.intp]) -> int:
    """Index of the touch-down from which on the odometry's velocity, averaged over each cycle,
    is that of the last cycle; and one cycle more, for the body to settle."""
    means = [np.mean(r.velocity[a:b], axis=0) for a, b in pairwise(beats)]
    if not means:
        return 0
    scale = np.array([0.02, 0.02, 0.1]) + np.max(np.abs(means[-1]))
    unsteady = [bool(np.any(np.abs(mean - means[-1]) > STEADY_SHARE * scale)) for mean in means]
    first = len(unsteady) - unsteady[::-1].index(True) if True in unsteady else 0
    return first + 1 if len(means) - first > LEAST_CYCLES else first


def _fall(r: Recording) -> tuple[bool, str]:
    tilt = np.arccos(np.clip(r.true_rotation[:, 2, 2], -1.0, 1.0))
    tipped = tilt > FELL_TILT_RAD
    if np.any(tipped):
        at = int(np.argmax(tipped))
        return True, f"tipped over {math.degrees(FELL_TILT_RAD):.0f} deg at {r.time_s[at]:.2f} s"
    lying = np.array([state in LYING_STATES for state in r.state])
    may_lie = lying | ~r.powered | (r.height_m < r.robot.stance.rest_height_m + LYING_M)
    touched = r.trunk_touches & ~may_lie
    if np.any(touched):
        return True, f"the trunk touched the floor at {r.time_s[int(np.argmax(touched))]:.2f} s"
    return False, ""


def _along_cycles(r: Recording) -> float:
    """Way of the trunk over the ground, m, from touch-down to touch-down: sway does not count."""
    marks = [0, *touch_downs(r).tolist(), len(r.time_s) - 1]
    points = r.true_position_m[marks, :2]
    return float(np.sum(np.hypot(*np.diff(points, axis=0).T)))


def _scuffs(r: Recording) -> tuple[int, int]:
    scuffs = swings = 0
    for leg in range(len(r.robot.legs)):
        down = r.stance[:, leg].astype(int)
        ups = np.flatnonzero(np.diff(down) == -1) + 1
        for up in ups:
            landed = np.flatnonzero(down[up:])
            if not len(landed):
                continue
            swings += 1
            first = up + int(MID_SWING[0] * landed[0])
            last = up + int(MID_SWING[1] * landed[0]) + 1
            scuffs += bool(np.any(r.foot_force_n[first:last, leg] > LOADED_N))
    return scuffs, swings


def _odometry_error(r: Recording) -> tuple[float, float, float]:
    """Where the robot ended, less where its odometry says, in the frame it started from."""
    headings = headings_rad(r)
    dx, dy = r.true_position_m[-1, :2] - r.true_position_m[0, :2]
    c, s = math.cos(headings[0]), math.sin(headings[0])
    x0, y0, yaw0 = r.pose[0]
    x1, y1, yaw1 = r.pose[-1]
    turn = float(headings[-1] - headings[0]) - float(yaw1 - yaw0)
    # The odometry's own start need not be at the origin of its frame.
    ahead, left = x1 - x0, y1 - y0
    c0, s0 = math.cos(yaw0), math.sin(yaw0)
    return (
        float(c * dx + s * dy - (c0 * ahead + s0 * left)),
        float(-s * dx + c * dy - (-s0 * ahead + c0 * left)),
        math.remainder(turn, math.tau),
    )


def _vec3(values: Floats) -> Vec3:
    return float(values[0]), float(values[1]), float(values[2])
