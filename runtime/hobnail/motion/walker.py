"""The walk: gait clock, feet and body over the ground, one tick after another; m, s, rad.

A pure object: time comes in as `dt_s`, and the same calls give the same bits.
It holds the body's path (odometry), a gait clock that all legs share, and each
foot in the ground frame.  Stance feet stay where they are there, which in the
body frame is the exact inverse of the body's motion.  Angles are solved leg by
leg; when one would turn too fast, the whole tick is taken again over a shorter
time, so that every foot stays on its path and the robot is only slower.

What it does not do: pulses (`hobnail.controller`), states and stops
(`hobnail.service`).
"""

from __future__ import annotations

import math
from collections.abc import Sequence

from hobnail.motion.balance import GRAVITY_M_S2, Sway, neutral_feet
from hobnail.motion.foot import LAST_AIM, Foot, FootState, Swing
from hobnail.motion.foot_path import FootPath
from hobnail.motion.glide import AT_REST, Glide, GlideState, Motion, Slew, SlewState, minimum_jerk, settle
from hobnail.motion.leg import LegKinematics
from hobnail.motion.pacing import (
    CycleTable,
    fit_envelope,
    fit_stride,
    peak_foot_velocities,
    reach_radius,
    room_between_feet,
)
from hobnail.motion.planar import Pose, Twist, compose, exp_twist
from hobnail.robot import Gait, Robot, Span, Vec2, Vec3

_Saved = tuple[
    tuple[Pose, float, float],
    tuple[Vec2, Vec2, tuple[Motion, Motion], float],
    SlewState,
    GlideState,
    list[FootState],
]

STILL: Twist = (0.0, 0.0, 0.0)
# A foot nearer than this to its neutral place need not step when the robot stops.
IN_PLACE_M = 1e-4
# Reach kept in hand when a foot's excursion at its next lift-off is foreseen.
REACH_SHARE = 0.95
# Longest part of a cycle taken in one stride of the clock; a longer tick is cut.
CLOCK_STEP = 0.05
# Share of a cycle over which a foot takes up and gives off its load, at most.
LOAD_RAMP = 0.1
LOAD_RATE_HZ = 40.0  # and never faster than the whole weight in 1/40 s
# Of the allowed joint step: rounding must not carry a joint past it.
STEP_SHARE = 0.9999
RETRIES = 8
# Share of a cycle for the body to move over its first support before a foot lifts.
START_SHIFT = 0.25
# Height above rest (m) over which the feet take the weight from the belly.
LOADING_M = 0.01

HEIGHT, ROLL, PITCH, YAW, LEAN_X, LEAN_Y = range(6)


class Walker:
    """The robot's motion.  A new one stands at its neutral stance, or lies at rest height."""

    def __init__(
        self, robot: Robot, limits_rad: Sequence[tuple[Span, ...]], *, at_rest: bool = False
    ) -> None:
        self._robot = robot
        stance = robot.stance
        rates = robot.posture_limits
        self._weight_n = robot.mass_kg * GRAVITY_M_S2
        self._neutral = neutral_feet(robot)
        height = stance.rest_height_m if at_rest else stance.height_m
        self._posture = Glide(
            [height, 0.0, 0.0, 0.0, 0.0, 0.0],
            [rates.rate_m_s, *[rates.rate_rad_s] * 3, rates.rate_m_s, rates.rate_m_s],
        )
        self._pose: Pose = (0.0, 0.0, 0.0)
        self._clock = 0.0
        self._wanted: Twist = STILL  # the command, at the body origin, as it came
        self._pace = Slew([0.0, 0.0, 0.0, 1.0])  # vx, vy, yaw rate, cycles a second
        self._feet: list[Foot] = []
        for leg, neutral, limits in zip(robot.legs, self._neutral, limits_rad, strict=True):
            at = self._from_hip(leg.hip_m, neutral, leg.foot_radius_m)
            kinematics = LegKinematics(leg)
            angles = kinematics.angles(*kinematics.nearest_reachable(*at))
            self._feet.append(Foot(leg, neutral, angles, limits, 1.0 / len(robot.legs)))
        self._gait: Gait
        self._next_gait: Gait | None = None
        self._tables: dict[str, CycleTable] = {}
        self._choose(robot.gaits[0])
        self._walking = False  # the gait clock runs
        self._planting = False  # once the body is still no foot may lift any more
        self._lowering: tuple[float | None] | None = None  # lie down when still, within a time
        self._hold = 0.0  # cycles until feet may lift
        self._checking = False  # feet may be led out of reach: look ahead every tick
        self._sway_shift: Vec2 = (0.0, 0.0)
        self._sway_speed: Vec2 = (0.0, 0.0)
        self._sway_ease: tuple[Motion, Motion] = (AT_REST, AT_REST)
        self._sway_left_s = 0.0
        self.slow_supply = 1.0  # by how much the supply slows the servos, >= 1
        self.slowdown = 1.0
        self.velocity: Twist = STILL
        self.out_of_reach = 0
        self.clamped = 0
        self.pose: Pose = self._pose
        self.feet_m: tuple[Vec3, ...] = ()
        self.joints_rad: tuple[Vec3, ...] = ()
        self.commanded_rad: tuple[Vec3, ...] = ()
        self._solve()

    # -- what is asked of it -------------------------------------------------

    def walk(self, twist: Twist) -> None:
        """Command a twist at the body origin (m/s, m/s, rad/s)."""
        self._lowering = None
        if twist != self._wanted:
            self._wanted = twist
            self._planting = False
            if self._walking:
                self._retarget()

    def choose_gait(self, gait: Gait) -> None:
        """Change the gait: feet in the air land first, then the new one starts."""
        if gait is self._gait:
            self._next_gait = None
        elif self._walking:
            self._next_gait = gait
            self._checking = True
        else:
            self._choose(gait)

    def set_posture(self, target: Sequence[float], within_s: float | None = None) -> None:
        """Glide the posture to (height, roll, pitch, yaw, lean x, lean y), m and rad."""
        self._lowering = None
        self._posture.aim(target, within_s)

    def lower(self, within_s: float | None = None) -> None:
        """Stop walking, then lower the body, level, to rest height.  With a time set, feet
        that are down when the body is still stay there; else they step to neutral first."""
        self.walk(STILL)
        self._planting = within_s is not None
        self._lowering = (within_s,)

    # -- what it is doing ----------------------------------------------------

    @property
    def gait(self) -> Gait:
        """The gait whose schedule the feet follow now."""
        return self._gait

    @property
    def posture(self) -> tuple[float, ...]:
        """Height, roll, pitch, yaw, lean x, lean y now (m, rad)."""
        return tuple(self._posture.value)

    @property
    def height_m(self) -> float:
        """Body origin above the ground."""
        return self._posture.value[HEIGHT]

    @property
    def posture_target(self) -> list[float]:
        """Where the posture is going."""
        return self._posture.target

    @property
    def stance(self) -> tuple[bool, ...]:
        """Which feet are on the ground."""
        return tuple(foot.swing is None for foot in self._feet)

    @property
    def walking(self) -> bool:
        """Whether the gait clock runs or the body has a velocity."""
        return self._walking

    @property
    def settled(self) -> bool:
        """Whether nothing moves and nothing is about to."""
        return not (
            self._walking
            or self._posture.moving
            or self._sway_left_s > 0.0
            or self._wanted != STILL
            or self._next_gait
            or self._lowering
        )

    # -- the tick ------------------------------------------------------------

    def tick(self, dt_s: float, steps_rad: Sequence[Vec3]) -> None:
        """Move on by `dt_s`, no joint by more than its step (rad, leg by leg)."""
        self._decide()
        before = self.commanded_rad
        before_plain = self.joints_rad
        saved = self._save()
        time_s = dt_s
        for attempt in range(RETRIES):
            self._advance(time_s)
            self._solve()
            excess = max(
                _excess(before, self.commanded_rad, steps_rad),
                _excess(before_plain, self.joints_rad, steps_rad),
            )
            if excess <= 1.0:
                break
            self._restore(saved)
            # Nearly linear in time: one more try is the rule.
            time_s *= min(0.98 / excess, 0.9)
            if attempt == RETRIES - 2:
                time_s = 0.0
        self.clamped = 0
        if excess > 1.0:
            self._clamp(before, steps_rad)
        self.slowdown = time_s / dt_s
        share = self.slowdown
        pace = self._pace.value
        self.velocity = (pace[0] * share, pace[1] * share, pace[2] * share)

    def _decide(self) -> None:
        """What takes no time: to start, to go over to another gait, to slow, to end."""
        if not self._walking:
            if self._wanted == STILL:
                if self._lowering:
                    rest = self._robot.stance.rest_height_m
                    self._posture.aim([rest, 0.0, 0.0, 0.0, 0.0, 0.0], self._lowering[0])
                    self._lowering = None
                return
            self._start()
        elif self._next_gait or self._wanted == STILL:
            self._change_or_stop()
        if self._checking:
            self._look_ahead()

    def _advance(self, time_s: float) -> None:
        """Posture, body, clock and feet, `time_s` on."""
        if self._posture.moving:
            self._posture.advance(time_s)
        if not self._walking:
            self._share_load(time_s, [1.0] * len(self._feet))
            if self._sway_left_s > 0.0:
                self._move_sway(time_s)
            return
        step = self._pace.value[3] * time_s
        parts = math.ceil(step / CLOCK_STEP) if step > CLOCK_STEP else 1
        for _ in range(parts):
            self._walk_on(time_s / parts)

    def _walk_on(self, time_s: float) -> None:
        pace = self._pace
        steady = not pace.moving
        vx, vy, yaw_rate, rate = pace.value
        if not steady:
            pace.advance(time_s)
            # The mean over the part: the body's path is that of a held twist.
            end = pace.value
            vx, vy = 0.5 * (vx + end[0]), 0.5 * (vy + end[1])
            yaw_rate, rate = 0.5 * (yaw_rate + end[2]), 0.5 * (rate + end[3])
        self._pose = compose(self._pose, exp_twist(vx, vy, yaw_rate, time_s))
        turn = rate * time_s
        self._clock = (self._clock + turn) % 1.0
        self._hold -= turn
        self._move_feet(time_s, rate, steady)
        if self._sway.active or self._sway_left_s > 0.0:
            self._move_sway(time_s)

    def _move_feet(self, time_s: float, rate: float, steady: bool) -> None:
        gait = self._gait
        duty = gait.duty
        airtime = 1.0 - duty
        clock = self._clock
        path = self._path
        ramp = self._ramp
        weights = []
        for foot in self._feet:
            old = foot.phase
            phase = foot.phase = (clock - foot.offset) % 1.0
            swing = foot.swing
            if swing is None:
                if old < duty <= phase and self._may_lift(foot):
                    here = (foot.x, foot.y)
                    swing = Swing(here, self._foothold(foot, (1.0 - old) / rate), AT_REST, AT_REST)
                    foot.stepped = True
            elif phase < old:
                foot.x, foot.y = swing.target
                foot.lift_m = 0.0
                swing = None
            elif not (steady and swing.settled):
                left = (1.0 - old) / rate
                late = 1.0 - old < LAST_AIM * airtime
                target = None if steady or late else self._foothold(foot, (1.0 - phase) / rate)
                swing = swing.re_aimed(target, time_s, left)
            foot.swing = swing
            if swing is not None:
                foot.x, foot.y, lift = swing.at(path, (phase - duty) / airtime)
                foot.lift_m = gait.lift_m * lift
                weight = 0.0
            elif phase >= duty:
                weight = 1.0
            elif phase < ramp:
                weight = minimum_jerk(phase / ramp)
            elif phase > duty - ramp:
                weight = minimum_jerk((duty - phase) / ramp)
            else:
                weight = 1.0
            weights.append(weight)
        self._share_load(time_s, weights)

    def _share_load(self, time_s: float, weights: Sequence[float]) -> None:
        """Share the robot's weight over the feet as their weights say, without a jump."""
        most = LOAD_RATE_HZ * time_s
        total = sum(weights) or 1.0
        for foot, weight in zip(self._feet, weights, strict=True):
            foot.load += max(-most, min(most, weight / total - foot.load))

    def _foothold(self, foot: Foot, until_touch_down_s: float) -> Vec2:
        """Where on the ground the foot must land: under its neutral place at the body's
        pose half a stance after touch-down, under the present twist (for a straight
        walk the neutral point of Raibert 1986, v T / 2 ahead; memory)."""
        vx, vy, yaw_rate, rate = self._pace.value
        ahead = exp_twist(vx, vy, yaw_rate, until_touch_down_s + 0.5 * self._gait.duty / rate)
        x, y, yaw = compose(self._pose, ahead)
        c, s = math.cos(yaw), math.sin(yaw)
        nx, ny = foot.neutral
        return x + c * nx - s * ny, y + s * nx + c * ny

    def _excursion(self, foot: Foot) -> Vec2:
        """The foot's place relative to its neutral one (walking frame, m)."""
        x, y, yaw = self._pose
        c, s = math.cos(yaw), math.sin(yaw)
        dx, dy = foot.x - x, foot.y - y
        return c * dx + s * dy - foot.neutral[0], c * dy - s * dx - foot.neutral[1]

    # -- starting, changing, stopping ----------------------------------------

    def _may_lift(self, foot: Foot) -> bool:
        if self._hold > 0.0 or self._next_gait:
            return False
        if self._pace.moving or self._wanted != STILL:
            return True
        return not self._planting and math.hypot(*self._excursion(foot)) > IN_PLACE_M

    def _start(self) -> None:
        """Set the gait clock so that a foot lifts as soon as the body is over the support
        that it leaves."""
        gait = self._gait
        lifts = sorted((phase + gait.duty) % 1.0 for phase in gait.phases)
        gaps = [(lift - before) % 1.0 for before, lift in zip([lifts[-1], *lifts[:-1]], lifts, strict=True)]
        first = lifts[gaps.index(max(gaps))]
        shifts = self._sway.active or self._sway_shift != (0.0, 0.0)
        self._hold = START_SHIFT if shifts else 0.0
        self._clock = (first - self._hold - 1e-9) % 1.0
        for foot in self._feet:
            foot.phase = (self._clock - foot.offset) % 1.0
            foot.stepped = False
        self._walking = True
        self._retarget()
        self._pace.jump(3, self._pace.target[3])
        if shifts:
            self._change_sway()

    def _choose(self, gait: Gait) -> None:
        self._gait = gait
        self._path = FootPath(gait.swing)
        self._sway = Sway(self._neutral, gait, self._robot.stance.height_m)
        self._ramp = max(min(LOAD_RAMP, gait.duty - 0.5), 0.05)
        neutrals = []
        reaches = []
        for foot, phase in zip(self._feet, gait.phases, strict=True):
            foot.offset = phase
            neutral = self._from_hip(foot.hip, foot.neutral, foot.radius_m)
            neutrals.append(neutral)
            reaches.append(reach_radius(foot.kinematics, foot.limits, neutral, gait.lift_m))
        room = room_between_feet(self._neutral, [foot.radius_m for foot in self._feet])
        for foot, reach, space in zip(self._feet, reaches, room, strict=True):
            foot.reach_m = min(reach, space)
        if gait.cycle_s is None and gait.name not in self._tables:
            share = self._robot.supply.nominal_v
            speeds = [
                tuple(
                    joint.servo.speed_rad_s * joint.servo.usable_speed * share / joint.servo.rated_v
                    for joint in leg.joints
                )
                for leg in self._robot.legs
            ]
            self._tables[gait.name] = CycleTable(
                gait,
                [foot.kinematics for foot in self._feet],
                neutrals,
                speeds,
                peak_foot_velocities(self._robot, self._neutral),
            )

    def _from_hip(self, hip: Vec3, neutral: Vec2, radius_m: float) -> Vec3:
        """A neutral foot at walking height, relative to its hip."""
        return (
            neutral[0] - hip[0],
            neutral[1] - hip[1],
            radius_m - self._robot.stance.height_m - hip[2],
        )

    def _retarget(self) -> None:
        """Bring the command within what may be asked, and start to slew towards it."""
        self._checking = True
        gait = self._gait
        twist = fit_envelope(self._wanted, self._robot.envelope)
        cycle = gait.cycle_s
        if cycle is None:
            vx, vy, w = twist
            velocities = [(vx - w * y, vy + w * x) for x, y in self._neutral]
            cycle = self._tables[gait.name].cycle_s(velocities, self.slow_supply)
        reaches = [foot.reach_m for foot in self._feet]
        self._fitted = fit_stride(twist, cycle * gait.duty, self._neutral, reaches)
        self._aim_pace(self._fitted, 1.0 / cycle)

    def _aim_pace(self, twist: Twist, rate_hz: float) -> None:
        envelope = self._robot.envelope
        along = envelope.acceleration_m_s2
        self._pace.aim((*twist, rate_hz), (along, along, envelope.turn_acceleration_rad_s2, 2.0 * rate_hz))

    def _look_ahead(self) -> None:
        """Slow the body when a standing foot would be led out of reach before it may lift:
        after a start, a change of gait or of command, until every foot has stepped."""
        vx, vy, yaw_rate = self._fitted
        rate = self._pace.target[3]
        duty = self._gait.duty
        share = 1.0
        regular = not self._pace.moving
        for foot in self._feet:
            regular &= foot.stepped
            if foot.swing is not None:
                continue
            wait = (duty - foot.phase) % 1.0
            if wait < self._hold:
                wait += 1.0
            if self._next_gait:
                wait = 1.0  # feet wait for the new gait
            x, y = foot.neutral
            time = wait / rate
            dx, dy = (vx - yaw_rate * y) * time, (vy + yaw_rate * x) * time
            ex, ey = self._excursion(foot)
            stride = 0.5 * duty / rate * math.hypot(vx - yaw_rate * y, vy + yaw_rate * x)
            limit = max(REACH_SHARE * foot.reach_m, stride)
            share = min(share, _share_within(ex, ey, dx, dy, limit))
        twist = (vx * share, vy * share, yaw_rate * share)
        if any(abs(a - b) > 1e-9 for a, b in zip(twist, self._pace.target, strict=False)):
            self._aim_pace(twist, rate)
        elif regular and share == 1.0:
            self._checking = False

    def _change_or_stop(self) -> None:
        """With every foot down: go over to the gait that waits, or end the walk."""
        if any(foot.swing for foot in self._feet):
            return
        if self._next_gait:
            self._choose(self._next_gait)
            self._next_gait = None
            self._start()
        elif self._wanted == STILL and not self._pace.moving and self._pace.value[:3] == [0.0] * 3:
            if not self._planting and any(
                math.hypot(*self._excursion(foot)) > IN_PLACE_M for foot in self._feet
            ):
                return
            self._walking = False
            self._checking = False
            if self._sway_shift != (0.0, 0.0):
                self._change_sway()

    # -- sway ----------------------------------------------------------------

    def _planned_sway(self, ahead_s: float = 0.0) -> Vec2:
        """The body's shift over the supports by the gait clock; none when standing."""
        if not (self._walking and self._sway.active):
            return 0.0, 0.0
        rate = self._pace.value[3]
        return self._sway.at(self._clock + rate * ahead_s, rate)

    def _change_sway(self) -> None:
        """Ease over from the shift that is to the one that the plan now asks for, within
        the time before a foot may lift."""
        instant = 1e-4
        now, soon = self._planned_sway(), self._planned_sway(instant)
        self._sway_ease = (
            (self._sway_shift[0] - now[0], self._sway_speed[0] - (soon[0] - now[0]) / instant, 0.0),
            (self._sway_shift[1] - now[1], self._sway_speed[1] - (soon[1] - now[1]) / instant, 0.0),
        )
        self._sway_left_s = START_SHIFT / self._pace.value[3]

    def _move_sway(self, time_s: float) -> None:
        x, y = self._planned_sway()
        left = self._sway_left_s
        if left > 0.0:
            ease_x, ease_y = self._sway_ease
            self._sway_ease = (settle(ease_x, time_s, left), settle(ease_y, time_s, left))
            self._sway_left_s = max(left - time_s, 0.0)
            x += self._sway_ease[0][0]
            y += self._sway_ease[1][0]
        if time_s > 0.0:
            self._sway_speed = ((x - self._sway_shift[0]) / time_s, (y - self._sway_shift[1]) / time_s)
        self._sway_shift = (x, y)

    # -- angles --------------------------------------------------------------

    def _solve(self) -> None:
        """Feet in the body frame, and the angles for them."""
        height, roll, pitch, yaw, lean_x, lean_y = self._posture.value
        x0, y0, heading = self._pose
        shift_x, shift_y = self._sway_shift[0] + lean_x, self._sway_shift[1] + lean_y
        if shift_x or shift_y:
            c, s = math.cos(heading), math.sin(heading)
            x0 += c * shift_x - s * shift_y
            y0 += s * shift_x + c * shift_y
        heading += yaw
        self.pose = (x0, y0, heading)
        c, s = math.cos(heading), math.sin(heading)
        tilted = roll != 0.0 or pitch != 0.0
        if tilted:
            cr, sr, cp, sp = math.cos(roll), math.sin(roll), math.cos(pitch), math.sin(pitch)
        raised = (height - self._robot.stance.rest_height_m) / LOADING_M
        weight = self._weight_n * min(max(raised, 0.0), 1.0)
        feet, plain, commanded = [], [], []
        self.out_of_reach = 0
        for foot in self._feet:
            dx, dy = foot.x - x0, foot.y - y0
            x, y, z = c * dx + s * dy, c * dy - s * dx, foot.radius_m + foot.lift_m - height
            if tilted:
                # The transpose of Ry(pitch) Rx(roll).
                x, z = cp * x - sp * z, sp * x + cp * z
                y, z = cr * y + sr * z, cr * z - sr * y
            hip_x, hip_y, hip_z = foot.hip
            at_y, at_z = y - hip_y, z - hip_z
            try:
                angles = foot.kinematics.angles(x - hip_x, at_y, at_z)
            except ValueError:
                angles = self._reach(foot, x - hip_x, at_y, at_z)
            a, b, d = angles
            (a0, a1), (b0, b1), (d0, d1) = foot.limits
            if not (a0 <= a <= a1 and b0 <= b <= b1 and d0 <= d <= d1):
                angles = (min(max(a, a0), a1), min(max(b, b0), b1), min(max(d, d0), d1))
                self.out_of_reach += 1
            feet.append((x, y, z))
            plain.append(angles)
            if foot.correction.active:
                a, b, d = foot.correction.apply(*angles, at_y, at_z, foot.load * weight)
                angles = (min(max(a, a0), a1), min(max(b, b0), b1), min(max(d, d0), d1))
            commanded.append(angles)
        self.feet_m = tuple(feet)
        self.joints_rad = tuple(plain)
        self.commanded_rad = tuple(commanded)

    def _reach(self, foot: Foot, x: float, y: float, z: float) -> Vec3:
        """Angles for the nearest point in reach."""
        self.out_of_reach += 1
        return foot.kinematics.angles(*foot.kinematics.nearest_reachable(x, y, z))

    def _clamp(self, before: tuple[Vec3, ...], steps_rad: Sequence[Vec3]) -> None:
        """The last resort: hold each joint to its step, off the path, and count it."""
        commanded = []
        for old, new, steps in zip(before, self.commanded_rad, steps_rad, strict=True):
            held = tuple(min(max(b, a - d), a + d) for a, b, d in zip(old, new, steps, strict=True))
            self.clamped += sum(h != b for h, b in zip(held, new, strict=True))
            commanded.append((held[0], held[1], held[2]))
        self.commanded_rad = tuple(commanded)

    # -- trying a tick again -------------------------------------------------

    def _save(self) -> _Saved:
        return (
            (self._pose, self._clock, self._hold),
            (self._sway_shift, self._sway_speed, self._sway_ease, self._sway_left_s),
            self._pace.state(),
            self._posture.state(),
            [foot.state() for foot in self._feet],
        )

    def _restore(self, saved: _Saved) -> None:
        body, sway, pace, posture, feet = saved
        self._pose, self._clock, self._hold = body
        self._sway_shift, self._sway_speed, self._sway_ease, self._sway_left_s = sway
        self._pace.restore(pace)
        self._posture.restore(posture)
        for foot, state in zip(self._feet, feet, strict=True):
            foot.restore(state)


def _excess(before: Sequence[Vec3], after: Sequence[Vec3], steps: Sequence[Vec3]) -> float:
    """Greatest joint step as a multiple of what is allowed."""
    worst = 0.0
    for (a0, b0, c0), (a1, b1, c1), (a, b, c) in zip(before, after, steps, strict=True):
        worst = max(worst, abs(a1 - a0) / a, abs(b1 - b0) / b, abs(c1 - c0) / c)
    return worst


def _share_within(ex: float, ey: float, dx: float, dy: float, limit: float) -> float:
    """Greatest share s <= 1 with |e - s d| <= limit; 0 when e itself is beyond it."""
    if math.hypot(ex - dx, ey - dy) <= limit:
        return 1.0
    d2 = dx * dx + dy * dy
    along = ex * dx + ey * dy
    spare = along * along - d2 * (ex * ex + ey * ey - limit * limit)
    if spare < 0.0:
        return 0.0
    return min(max((along + math.sqrt(spare)) / d2, 0.0), 1.0)
