"""The walk: gait clock, feet and body over the ground, one tick after another; m, s, rad.

A pure object: time comes in as `dt_s`, and the same calls give the same bits.
It holds the body's path (odometry), a gait clock that all legs share, and each
foot in the ground frame.  Stance feet stay where they are there, which in the
body frame is the exact inverse of the body's motion.  When a joint would turn
too fast, the whole tick is taken again over a shorter time, so that every foot
stays on its path and the robot is only slower.

What it does not do: pulses (`hobnail.controller`), states and stops
(`hobnail.service`).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from itertools import chain
from operator import ne

from hobnail.motion.balance import GRAVITY_M_S2, neutral_feet
from hobnail.motion.feed_forward import FeedForward
from hobnail.motion.foot import LAST_AIM, Foot, Swing
from hobnail.motion.glide import AT_REST, Glide, Slew, minimum_jerk
from hobnail.motion.joint_steps import clamp_steps, excess_step
from hobnail.motion.load import Drive
from hobnail.motion.pacing import fit_stride
from hobnail.motion.plan import GaitPlan
from hobnail.motion.planar import Pose, Twist, compose, exp_twist, point_speed
from hobnail.motion.recurrence import PlainState
from hobnail.motion.sway import NONE, BodyShift
from hobnail.motion.swung import SwungLeg
from hobnail.motion.whole_body import WholeBody
from hobnail.motion.yielding import Yielding
from hobnail.robot import Gait, Robot, Span, Vec2, Vec3

STILL: Twist = (0.0, 0.0, 0.0)
# A foot nearer than this to its neutral place need not step when the robot stops.
IN_PLACE_M = 1e-4
# Reach kept in hand when a foot's excursion at its next lift-off is foreseen.
REACH_SHARE = 0.95
# Longest part of a cycle taken in one stride of the clock; a longer tick is cut.
CLOCK_STEP = 0.05
# Share of a cycle for the body to move over its first support before a foot lifts.
START_SHIFT = 0.25
# Share of the command's speed at which a slow gait starts, until every foot has stepped:
# its balance counts on feet that are where the gait has put them.
START_SHARE = 0.2
# The feet's share of the weight never changes faster than all of it in 1/40 s.
LOAD_RATE_HZ = 40.0
# Height above rest (m) over which the feet take the weight from the belly.
LOADING_M = 0.01
# A body that goes no faster stands, when its gait is to change.
STANDING_M_S = 1e-4
# Spread of the feet across and along their line, below which they are one.
LEAST_SPREAD = 1e-3
RETRIES = 8
SHORTEST_LOWERING_S = 0.3  # left for lying down, however long planting the feet has taken
HEIGHTS = 32  # tried on the way down, when lying down
RETRY_EXCESS = 0.9995
LEAST_SHARE = 0.25  # of a try's time that the next one takes


class Walker:
    """The robot's motion.  A new one stands at its neutral stance, or lies at rest height.

    `body` holds the angles and feet of the latest tick, `feed_forward` what the servos
    are to be sent for them, `start` the state that it was taken from.
    """

    def __init__(
        self, robot: Robot, limits_rad: Sequence[tuple[Span, ...]], *, at_rest: bool = False
    ) -> None:
        self._robot = robot
        self._mass_kg = robot.mass_kg
        rates = robot.posture_limits
        self._posture = Glide(
            [robot.stance.rest_height_m if at_rest else robot.stance.height_m, *[0.0] * 5],
            [rates.rate_m_s, *[rates.rate_rad_s] * 3, rates.rate_m_s, rates.rate_m_s],
        )
        self._feet = [
            Foot(leg, neutral, robot.stance.height_m, limits, 1.0 / len(robot.legs))
            for leg, neutral, limits in zip(robot.legs, neutral_feet(robot), limits_rad, strict=True)
        ]
        self._plans = {gait.name: GaitPlan(robot, gait, self._feet) for gait in robot.gaits}
        self._plan = self._plans[robot.gaits[0].name]
        self._next_plan: GaitPlan | None = None
        self._pose: Pose = (0.0, 0.0, 0.0)  # of the walk: without shift and posture
        self._clock = 0.0
        self._hold = 0.0  # cycles until feet may lift
        self.wanted: Twist = STILL  # the command, at the body origin, as it came
        self._fitted: Twist = STILL  # the same, within what may be asked
        self._pace = Slew([0.0, 0.0, 0.0, 1.0])  # vx, vy, yaw rate, cycles a second
        self._shift = BodyShift()
        # Legs in the air, and the accelerations of their feet (ground frame, m/s^2).
        self._swinging: list[tuple[SwungLeg, float, float, float]] = []
        self._walking = False  # the gait clock runs
        self._checking = False  # feet may be led out of reach: look ahead every tick
        self._landing = False  # slow enough to change the gait: no foot may lift any more
        self._planting = False  # once the body is still no foot may lift any more
        self._lowering: tuple[float | None] | None = None  # lie down when still, within a time
        self.slow_supply = 1.0  # by how much the supply slows the servos, >= 1
        self.slowdown = 1.0
        self.velocity: Twist = STILL
        self.clamped = 0
        self.body = WholeBody(self._feet)
        self._yielding = Yielding(robot.stance.height_m)
        self._solve(0.0)
        self.feed_forward = FeedForward(self._feet, self.body, self._drive())
        self.start = self._state()

    # -- what is asked of it -------------------------------------------------

    @property
    def pose(self) -> Pose:
        """Odometry of the walk: the body without its shift and posture over the feet."""
        return self._pose

    def walk(self, twist: Twist) -> None:
        """Command a twist at the body origin (m/s, m/s, rad/s)."""
        self._lowering = None
        if twist != self.wanted:
            self.wanted = twist
            self._planting = False
            if self._walking:
                self._retarget()

    def choose_gait(self, gait: Gait) -> None:
        """Change the gait: the body slows down until feet may wait for their turn in the new
        one, then feet in the air land, then the new one starts."""
        plan = self._plans[gait.name]
        if plan is self._plan or not self._walking:
            self._plan, self._next_plan = plan, None
        else:
            self._next_plan = plan
        self._landing = False
        if self._walking:
            self._retarget()

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
        return self._plan.gait

    @property
    def height_m(self) -> float:
        """Body origin above the ground."""
        return self.body.height_m

    @property
    def posture_target(self) -> list[float]:
        """Where the posture is going."""
        return self._posture.target

    @property
    def stance(self) -> tuple[bool, ...]:
        """Which feet are on the ground."""
        return tuple([foot.swing is None for foot in self._feet])

    @property
    def walking(self) -> bool:
        """Whether the gait clock runs or the body has a velocity."""
        return self._walking

    @property
    def cycle_s(self) -> float:
        """Time of a cycle of the gait clock."""
        return 1.0 / self._pace.value[3]

    @property
    def steady(self) -> bool:
        """Whether it walks at one pace and posture, in full, so that the tick may recur."""
        return self._walking and not (
            self._pace.moving
            or self._checking
            or self._next_plan
            or self.wanted == STILL
            or self._posture.moving
            or self._yielding.moving
            or self.slowdown != 1.0
            or self.clamped
            or self.body.out_of_reach
        )

    def go_on_from(self, state: PlainState) -> None:
        """Take up a steady walk at a state of it."""
        self._restore(state)
        self._solve(0.0)

    @property
    def settled(self) -> bool:
        """Whether nothing moves and nothing is about to."""
        return not (
            self._walking
            or self._posture.moving
            or self._shift.moving
            or self._yielding.moving
            or self.wanted != STILL
            or self._next_plan
            or self._lowering
        )

    # -- the tick ------------------------------------------------------------

    def tick(self, dt_s: float, steps_rad: Sequence[Vec3]) -> None:
        """Move on by `dt_s`, no joint by more than its step (rad, leg by leg)."""
        self._decide()
        if self._lowering and self._lowering[0] is not None:
            # Time is running while the feet are planted.
            self._lowering = (max(self._lowering[0] - dt_s, SHORTEST_LOWERING_S),)
        body = self.body
        before = body.joints_rad
        start = self.start = self._state()
        time_s = dt_s
        tried = (0.0, 0.0)  # time and excess of the try before
        for attempt in range(RETRIES):
            self._advance(time_s)
            # What comes back of a posture must not slow a walk.
            self._solve(0.0 if attempt and self._walking else time_s)
            excess = excess_step(before, body.joints_rad, steps_rad)
            if excess <= 1.0 or attempt == RETRIES - 1:
                break
            self._restore(start)
            # Along the line through this try and the one before it (at first, no time and no
            # step): one or two are the rule, and leave the slow-down a smooth function of the
            # path.  What is a step in however short a time is met by the clamp, so that the
            # robot does not stand still for good.  The feed-forward has no say: it follows
            # as the servos can.
            tried, (last_s, last_excess) = (time_s, excess), tried
            rise = (excess - last_excess) / (time_s - last_s)
            shorter_s = time_s - (excess - RETRY_EXCESS) / rise if rise > 0.0 else 0.0
            time_s = max(shorter_s, LEAST_SHARE * time_s)
        self.clamped = 0
        if excess > 1.0:
            on_path = body.joints_rad
            body.joints_rad = tuple(map(clamp_steps, before, on_path, steps_rad))
            self.clamped = sum(map(ne, chain(*body.joints_rad), chain(*on_path)))
        self.feed_forward.advance(before, self._drive(), time_s, steps_rad)
        share = self.slowdown = time_s / dt_s
        pace = self._pace.value
        self.velocity = (pace[0] * share, pace[1] * share, pace[2] * share)

    def _decide(self) -> None:
        """What takes no time: to start, to go over to another gait, to slow, to end."""
        if not self._walking:
            if self.wanted == STILL:
                if self._lowering:
                    self._posture.aim([self._lowest_m(), 0.0, 0.0, 0.0, 0.0, 0.0], self._lowering[0])
                    self._lowering = None
                return
            self._start()
        elif self._next_plan or self.wanted == STILL:
            self._change_or_stop()
        if self._checking:
            self._look_ahead()

    def _advance(self, time_s: float) -> None:
        """Posture, body, clock and feet, `time_s` on."""
        if self._posture.moving:
            self._posture.advance(time_s)
        if not self._walking:
            self._share_load(time_s, [1.0] * len(self._feet))
            if self._shift.moving:
                self._shift.advance(time_s, self._clock, self._pace.value)
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
        if self._shift.moving:
            self._shift.advance(time_s, self._clock, pace.value)

    def _move_feet(self, time_s: float, rate: float, steady: bool) -> None:
        plan = self._plan
        duty, lift_m = plan.gait.duty, plan.gait.lift_m
        airtime = 1.0 - duty
        hurry = (rate / airtime) ** 2
        clock = self._clock
        path = plan.path
        ramp = plan.load_ramp
        weights = []
        swinging = []
        for foot in self._feet:
            old = foot.phase
            phase = foot.phase = (clock - foot.offset) % 1.0
            swing = foot.swing
            if swing is None:
                if old < duty <= phase and self._may_lift(foot):
                    here = (foot.x, foot.y)
                    swing = Swing(here, self._foothold(foot, (1.0 - phase) / rate), AT_REST, AT_REST)
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
                x, y, lift, bend, rise = swing.at(path, (phase - duty) / airtime)
                foot.x, foot.y, foot.lift_m = x, y, lift_m * lift
                weight = 0.0
                (from_x, from_y), (to_x, to_y) = swing.start, swing.target
                bend *= hurry
                swinging.append(
                    (foot.swung, bend * (to_x - from_x), bend * (to_y - from_y), rise * hurry * lift_m)
                )
            elif phase >= duty:
                weight = 1.0
            elif phase < ramp:
                weight = minimum_jerk(phase / ramp)
            elif phase > duty - ramp:
                weight = minimum_jerk((duty - phase) / ramp)
            else:
                weight = 1.0
            weights.append(weight)
        self._swinging = swinging
        self._share_load(time_s, weights)

    def _share_load(self, time_s: float, weights: Sequence[float]) -> None:
        """Share the robot's weight over the feet as their weights say, without a jump."""
        most = LOAD_RATE_HZ * time_s
        if not (self._walking and self._plan.sway.active):
            weights = self._balanced(weights)
        total = sum(weights) or 1.0
        for foot, weight in zip(self._feet, weights, strict=True):
            share = weight / total
            change = share - foot.load
            foot.load = share if -most <= change <= most else foot.load + math.copysign(most, change)

    def _balanced(self, weights: Sequence[float]) -> Sequence[float]:
        """Weights with which the feet carry the body where it is, when no sway brings it to where
        they carry alike: changed in proportion to how far ahead and to the left each stands."""
        x0, y0, yaw = self._pose
        c, s = math.cos(yaw), math.sin(yaw)
        com_x, com_y = self._plan.com_m
        shift_x, shift_y = self._shift.value
        *_, lean_x, lean_y = self._posture.value
        com_x, com_y = com_x + shift_x + lean_x, com_y + shift_y + lean_y
        total = x = y = xx = xy = yy = 0.0
        places = []
        for foot, weight in zip(self._feet, weights, strict=True):
            dx, dy = foot.x - x0, foot.y - y0
            at_x, at_y = c * dx + s * dy - com_x, c * dy - s * dx - com_y
            places.append((at_x, at_y))
            total += weight
            x += weight * at_x
            y += weight * at_y
            xx += weight * at_x * at_x
            xy += weight * at_x * at_y
            yy += weight * at_y * at_y
        if total == 0.0:
            return weights
        x, y, xx, xy, yy = x / total, y / total, xx / total, xy / total, yy / total
        xx, xy, yy = xx - x * x, xy - x * y, yy - y * y
        det = xx * yy - xy * xy
        if det < LEAST_SPREAD * (xx + yy) ** 2:
            return weights
        by_x, by_y = (y * xy - x * yy) / det, (x * xy - y * xx) / det
        return [
            max(weight * (1.0 + by_x * (at_x - x) + by_y * (at_y - y)), 0.0)
            for weight, (at_x, at_y) in zip(weights, places, strict=True)
        ]

    def _foothold(self, foot: Foot, until_touch_down_s: float) -> Vec2:
        """Where on the ground the foot must land: under its neutral place at the body's
        pose half a stance after touch-down, under the present twist (for a straight
        walk the neutral point of Raibert 1986, v T / 2 ahead; memory)."""
        vx, vy, yaw_rate, rate = self._pace.value
        ahead = exp_twist(vx, vy, yaw_rate, until_touch_down_s + 0.5 * self._plan.gait.duty / rate)
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
        if self._hold > 0.0 or self._landing:
            return False
        if self._pace.moving or self.wanted != STILL:
            return True
        return not self._planting and math.hypot(*self._excursion(foot)) > IN_PLACE_M

    def _start(self) -> None:
        """Set the gait clock so that a foot lifts as soon as the body is over the support
        that it leaves."""
        plan = self._plan
        shifts = plan.sway.leads or self._shift.value != NONE
        self._walking = True
        self._landing = False
        self._hold = START_SHIFT if shifts else 0.0
        self._clock = (self._first_lift() - self._hold - 1e-9) % 1.0
        for foot, phase in zip(self._feet, plan.gait.phases, strict=True):
            foot.offset = phase
            foot.phase = (self._clock - phase) % 1.0
            foot.stepped = False
        self._retarget()
        rate = self._pace.target[3]
        self._pace.jump(3, rate)
        self._shift.change(plan.sway, self._clock, self._pace.value, START_SHIFT / rate)

    def _first_lift(self) -> float:
        """Time of the cycle to start at: a lift-off after as long a time without one as the
        gait has, and of those the one that is rearmost on the way to go, since the body
        will be moving off the feet that stay behind."""
        gait = self._plan.gait
        lifts = [(phase + gait.duty) % 1.0 for phase in gait.phases]
        gaps = [min((lift - other) % 1.0 or 1.0 for other in lifts) for lift in lifts]
        vx, vy, _ = self.wanted
        _, first = min(
            (foot.neutral[0] * vx + foot.neutral[1] * vy, lift)
            for foot, lift, gap in zip(self._feet, lifts, gaps, strict=True)
            if gap > max(gaps) - 1e-9
        )
        return first

    def _lowest_m(self) -> float:
        """Height to lie down to: rest height, or as near to it as the legs fold over feet that
        were planted in mid-stride."""
        rest, height = self._robot.stance.rest_height_m, self._posture.value[0]
        body = WholeBody(self._feet)
        lowest = height
        for step in range(1, HEIGHTS + 1):
            lower = height + (rest - height) * step / HEIGHTS
            body.solve(self._pose, NONE, (lower, 0.0, 0.0, 0.0, 0.0, 0.0))
            if body.out_of_reach:
                return lowest
            lowest = lower
        return rest

    def _retarget(self) -> None:
        """Bring the command within what may be asked, and start to slew towards it."""
        self._checking = True
        self._fitted, rate = self._plan.fit(self.wanted, self.slow_supply)
        if self._next_plan:
            self._fitted = self._slowed_for_change(self._next_plan, rate)
        self._aim_pace(self._fitted, rate)

    def _slowed_for_change(self, plan: GaitPlan, rate_hz: float) -> Twist:
        """As much of the command as leaves all feet in reach while those in the air land and
        the others wait for their turn in the next gait."""
        _, next_hz = plan.fit(self.wanted, self.slow_supply)
        duty = self._plan.gait.duty
        wait_s = (0.5 * duty + 1.0 - duty) / rate_hz + (1.0 + START_SHIFT) / next_hz
        feet = [foot.neutral for foot in self._feet]
        reach = [min(pair) for pair in zip(self._plan.reach_m, plan.reach_m, strict=True)]
        return fit_stride(self._fitted, 2.0 * wait_s, feet, reach)

    def _slow_enough(self) -> bool:
        """Whether no foot goes faster over the ground than it is to."""
        now = (self._pace.value[0], self._pace.value[1], self._pace.value[2])
        return all(
            point_speed(now, *foot.neutral) <= 1.02 * point_speed(self._fitted, *foot.neutral) + STANDING_M_S
            for foot in self._feet
        )

    def _aim_pace(self, twist: Twist, rate_hz: float) -> None:
        envelope = self._robot.envelope
        along = min(envelope.acceleration_m_s2, self._plan.acceleration_m_s2)
        self._pace.aim((*twist, rate_hz), (along, along, envelope.turn_acceleration_rad_s2, 2.0 * rate_hz))

    def _look_ahead(self) -> None:
        """Slow the body when a standing foot would be led out of reach before it may lift:
        after a start, a change of gait or of command, until every foot has stepped."""
        vx, vy, yaw_rate = self._fitted
        rate = self._pace.target[3]
        duty = self._plan.gait.duty
        share = 1.0
        regular = not self._pace.moving
        for foot, reach in zip(self._feet, self._plan.reach_m, strict=True):
            regular &= foot.stepped
            if foot.swing is not None:
                continue
            wait = (duty - foot.phase) % 1.0
            if wait < self._hold:
                wait += 1.0
            if self._landing:
                wait = 1.0  # feet wait for the new gait
            x, y = foot.neutral
            time = wait / rate
            dx, dy = (vx - yaw_rate * y) * time, (vy + yaw_rate * x) * time
            ex, ey = self._excursion(foot)
            stride = 0.5 * duty / rate * math.hypot(vx - yaw_rate * y, vy + yaw_rate * x)
            limit = max(REACH_SHARE * reach, stride)
            share = min(share, _share_within(ex, ey, dx, dy, limit))
            if not foot.stepped and self._plan.sway.leads:
                share = min(share, START_SHARE)
        twist = (vx * share, vy * share, yaw_rate * share)
        if any(abs(a - b) > 1e-9 for a, b in zip(twist, self._pace.target, strict=False)):
            self._aim_pace(twist, rate)
        elif regular and share == 1.0:
            self._checking = False

    def _change_or_stop(self) -> None:
        """With every foot down: go over to the gait that waits, or end the walk."""
        if self._next_plan and self._slow_enough():
            self._landing = True
        if any(foot.swing for foot in self._feet):
            return
        if self._next_plan:
            if self._landing:
                self._plan, self._next_plan = self._next_plan, None
                self._start()
        elif self.wanted == STILL and not self._pace.moving and self._pace.value[:3] == [0.0] * 3:
            if not self._planting and any(
                math.hypot(*self._excursion(foot)) > IN_PLACE_M for foot in self._feet
            ):
                return
            self._walking = False
            self._checking = False
            pace = self._pace.value
            self._shift.change(None, self._clock, pace, START_SHIFT / pace[3])

    # -- angles --------------------------------------------------------------

    def _solve(self, time_s: float) -> None:
        shift, posture = self._shift.value, self._posture.value
        self._yielding.solve(self.body, self._pose, shift, posture, time_s)

    def _drive(self) -> Drive:
        """What carries the body and drives it and the legs in the air along."""
        raised = (self.height_m - self._robot.stance.rest_height_m) / LOADING_M
        mass = self._mass_kg * min(max(raised, 0.0), 1.0)
        (ahead, left), slope = self._shift.acceleration, self._pace.slope
        ahead, left = self._yielding.share * ahead, self._yielding.share * left
        c, s = math.cos(self._pose[2]), math.sin(self._pose[2])
        share_x, share_y = self._plan.sway.body_share
        force_x, force_y = mass * (share_x * ahead + slope[0]), mass * (share_y * left + slope[1])
        force_z = mass * GRAVITY_M_S2
        com_x, com_y = self._plan.com_m
        moment = com_x * force_y - com_y * force_x
        for leg, along, across, up in self._swinging:
            of_x, of_y, of_z = leg.momentum_kg
            _, _, of_turn = leg.angular_kg_m
            x, y = c * along + s * across, c * across - s * along
            force_x += of_x[0] * x + of_x[1] * y + of_x[2] * up
            force_y += of_y[0] * x + of_y[1] * y + of_y[2] * up
            force_z += of_z[0] * x + of_z[1] * y + of_z[2] * up
            moment += of_turn[0] * x + of_turn[1] * y + of_turn[2] * up
        return force_x, force_y, force_z, moment

    # -- trying a tick again -------------------------------------------------

    def _state(self) -> PlainState:
        return (
            self._pose,
            self._clock,
            self._hold,
            self._yielding.share,
            self._shift.state(),
            self._pace.state(),
            self._posture.state(),
            [foot.state() for foot in self._feet],
            self.feed_forward.state(),
        )

    def _restore(self, state: PlainState) -> None:
        self._pose, self._clock, self._hold, share, shift, pace, posture, feet, feed_forward = state
        self._yielding.share = share
        self._shift.restore(shift)
        self._pace.restore(pace)
        self._posture.restore(posture)
        for foot, kept in zip(self._feet, feet, strict=True):
            foot.restore(kept)
        self.feed_forward.restore(feed_forward)


def _share_within(ex: float, ey: float, dx: float, dy: float, limit: float) -> float:
    """Greatest share s <= 1 with |e - s d| <= limit; 0 when e itself is beyond it."""
    if math.hypot(ex - dx, ey - dy) <= limit:
        return 1.0
    d2 = dx * dx + dy * dy
    if d2 == 0.0:
        return 1.0
    along = ex * dx + ey * dy
    spare = along * along - d2 * (ex * ex + ey * ey - limit * limit)
    if spare < 0.0:
        return 0.0
    return min(max((along + math.sqrt(spare)) / d2, 0.0), 1.0)
