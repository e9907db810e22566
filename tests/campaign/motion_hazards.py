"""Hazards of moving: late ticks, feet that lift, servos that sag, overheat or lose their supply.

The geometry here (feet, centre of mass, support, sag) is worked out anew from
the robot's description; SI units, body frame.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace
from itertools import pairwise

from campaign.acts import (
    LATCHED,
    end,
    expect_fault,
    first_cause,
    heed,
    prove_latched,
    refused,
    robot_in,
    silent,
)
from campaign.world import brisk, demo, slowest_gait
from hobnail.controller import Tick
from hobnail.robot import Leg, Robot
from hobnail.service.power import SupplyWatch
from hobnail_drivers.bus_model import BusModel
from hobnail_drivers.supply import Ina219, Ina219Model

STALL_S = 0.203
GRAVITY_M_S2 = 9.81
ON_FEET = frozenset({"standing", "walking"})
SETTLED_S = 2.5  # after a change of command: the body over its new path
# About the edge of its support; at about this tilt a lifted foot (30 mm of clearance, some
# 180 mm from the edge) is on the ground again and ends the tipping.
TILT_DEG = 9.0


def late_ticks(state: str) -> str:
    """The whole program stands still for 200 ms."""
    with robot_in(state) as world:
        stands = round(STALL_S / world.robot.period_s)
        world.witness.may_be_late_s = 0.0031  # the tick that comes when it ends, off the grid
        world.after(0.1, lambda: world.clock.sleep(STALL_S))
        world.run(0.6)
        expect_fault(world, "tick-overrun", cause=False)
        missed, world.witness.missed = world.witness.missed, 0
        assert stands - 1 <= missed <= stands + 1, f"{missed} ticks missed in a stall of {stands}"
        assert world.loop.skipped == missed, f"{world.loop.skipped} told, {missed} missed"
        if state not in LATCHED:
            assert world.state != "stopped", "a stall must not stop the robot"
        heed(world)  # no burst, no step beyond two periods
        now = world.state
        if now == "stopped":
            prove_latched(world)
        end(world)
    return f"{missed} ticks skipped and counted, no burst, steps within limits; {now}"


def supply_low(state: str) -> str:
    """The battery runs low, as an INA219 on the bus measures it, and is changed."""
    robot = brisk(demo())
    good_v, limit_v = robot.supply.nominal_v, robot.supply.low_v
    assert limit_v is not None
    meter = Ina219Model(volts=good_v)
    monitor = Ina219(1, open_bus=lambda _: BusModel([meter]))
    with robot_in(state, robot, supply=SupplyWatch(robot.supply), monitor=monitor) as world:
        meter.volts = 0.6 * good_v
        world.run(0.4)
        meter.volts = good_v  # a dip, as servos make when they start
        world.run(1.0)
        names = [fault["name"] for fault in world.told()["faults"]]
        assert "supply-low" not in names, "a dip is no empty battery"
        meter.volts = 0.96 * limit_v
        world.run(15.0)
        expect_fault(world, "supply-low", cause=False)
        assert first_cause(state, "supply-low") in str(world.told()["first_cause"])
        wanted = "stopped" if state in LATCHED else "off"
        assert world.state == wanted, f"{world.state}, wanted {wanted}"
        silent(world, 0.5)
        if state in LATCHED:
            world.ask("reset")
        refused(world, "stand", "battery")
        meter.volts = good_v
        world.run(20.0)
        silent(world, 0.2)
        world.ask("stand")
        world.until("standing", 20.0)
        end(world)
    return f"a dip is let pass; low: lay down, {wanted}, no waking until it is charged"


def servos_overheat(state: str) -> str:
    """A load three times too heavy; nobody comes back."""
    robot = brisk(demo(), load_limit_s=1.0, idle_rest_s=6.0, lost_rest_s=1.0)
    heavy = replace(robot, body=replace(robot.body, mass_kg=3.0 * robot.mass_kg))
    told_s: float | None = None
    with robot_in(state, heavy) as world:
        began_s = world.clock.now_s
        on_feet = False
        stopped = world.state in LATCHED

        def look() -> None:
            nonlocal told_s, on_feet
            on_feet = on_feet or world.state in ON_FEET
            if told_s is None and world.machine.faults.is_latched("overload"):
                told_s = world.clock.now_s - began_s
                expect_fault(world, "overload", cause=False)
                assert world.state != "stopped" or stopped, "a warning must not stop the robot"

        world.run(25.0, look)
        wanted = "stopped" if stopped else "off"
        assert world.state == wanted, f"{world.state} after 25 s of idleness, wanted {wanted}"
        silent(world, 0.1)
        if on_feet or state in ("off", "resting"):  # from the others it may have been told on the way in
            assert (told_s is not None) == on_feet, f"told after {told_s}; on its feet: {on_feet}"
        end(world)
    if told_s is None:
        return f"no load while it lies; {wanted} when left alone"
    return f"warned after {told_s:.1f} s, by estimate; rested, off when left alone"


def feet_lift(state: str) -> str:
    """The slowest gait is asked for far more than it can do: is the body over its support when feet lift?

    Judged by the zero-moment point of the commanded motion: quicker gaits
    balance in motion, on few feet.  In steady walking it has to be inside the
    support.  Right after a change of mind it may be outside for a moment, as
    long as the body, a rigid inverted pendulum, does not tip by more than
    TILT_DEG; in the physics engine it tips by less than half of that.
    """
    with robot_in(state) as world:
        gait = slowest_gait(world.robot)
        world.ask("gait", name=gait)
        seen: list[tuple[float, Tick]] = []  # seconds since the command changed

        def look() -> None:
            tick = world.machine.body.tick
            assert tick is not None
            seen.append((world.clock.now_s - changed_s, tick))

        for vx, vy, yaw_rate in ((5.0, 0.0, 0.0), (0.0, -5.0, 0.0), (-3.0, 2.0, 5.0)):
            changed_s = world.clock.now_s
            world.ask("walk", vx=vx, vy=vy, yaw_rate=yaw_rate, ttl_s=10.0)
            world.run(6.0, look)
        steady_m, tilt_deg = _balance(world.robot, gait, seen)
        assert len(steady_m) > 100, f"feet were in the air in {len(steady_m)} ticks only"
        assert min(steady_m) > 0.0, f"in steady walking {-1e3 * min(steady_m):.1f} mm beside its support"
        assert tilt_deg <= TILT_DEG, f"it tips by {tilt_deg:.1f} degrees after a change of command"
        world.ask("stop", category=1)
        world.until("stopped", 2.0)
        prove_latched(world)
        end(world)
    return (
        f"5 m/s asked of the {gait}: slowed; {1e3 * min(steady_m):.0f} mm of support left in steady walking, "
        f"tips by {tilt_deg:.1f} degrees at worst after a change"
    )


def _balance(robot: Robot, gait: str, seen: Sequence[tuple[float, Tick]]) -> tuple[list[float], float]:
    """With feet in the air in steady walking, what is left to the edge of the support (m); and how
    far the body tips about that edge at worst (degrees)."""
    steady, tilt, rate, worst = [], 0.0, 0.0, 0.0
    places = [_mass_on_ground(robot, tick) for _, tick in seen]
    dt_s = robot.period_s
    for index in range(1, len(seen) - 1):
        since_s, tick = seen[index]
        if tick.gait != gait:
            continue
        (x0, y0, _), (x, y, height), (x1, y1, _) = places[index - 1 : index + 2]
        lag = height / GRAVITY_M_S2 / dt_s**2  # of the zero-moment point behind the mass, a m/s^2
        px, py = x - lag * (x1 - 2.0 * x + x0), y - lag * (y1 - 2.0 * y + y0)
        left_m = margin_m(_standing_on_ground(tick), (px, py))
        rate += dt_s * GRAVITY_M_S2 / height * (tilt - left_m / height)
        tilt += dt_s * rate
        if tilt <= 0.0:  # all feet that should stand do
            tilt = rate = 0.0
        worst = max(worst, tilt)
        if since_s > SETTLED_S and not all(tick.stance):
            steady.append(left_m)
    return steady, math.degrees(worst)


def _mass_on_ground(robot: Robot, tick: Tick) -> tuple[float, float, float]:
    """Centre of mass in the frame of the odometry, and its height above the ground."""
    x, y, z = centre_of_mass(robot, tick.joints_rad)
    return *_on_ground(tick, x, y), tick.height_m + z


def _standing_on_ground(tick: Tick) -> list[tuple[float, float]]:
    return [
        _on_ground(tick, x, y) for (x, y, _), stands in zip(tick.feet_m, tick.stance, strict=True) if stands
    ]


def _on_ground(tick: Tick, x: float, y: float) -> tuple[float, float]:
    at_x, at_y, yaw = tick.pose
    return at_x + x * math.cos(yaw) - y * math.sin(yaw), at_y + x * math.sin(yaw) + y * math.cos(yaw)


def joints_sag(state: str) -> str:
    """Servos give under load: is the foot where it was meant to be?"""
    with robot_in(state) as world:
        world.run(1.0)
        tick = world.machine.body.tick
        assert tick is not None
        without_m, with_m = 0.0, 0.0
        load_n = world.robot.mass_kg * GRAVITY_M_S2 / len(world.robot.legs)
        for leg, meant, sent in zip(world.robot.legs, tick.joints_rad, tick.commanded_rad, strict=True):
            wanted = foot_m(leg, meant)
            without_m = max(without_m, math.dist(wanted, foot_m(leg, sagged(leg, meant, load_n))))
            with_m = max(with_m, math.dist(wanted, foot_m(leg, sagged(leg, sent, load_n))))
        assert with_m < 0.5 * without_m, (
            f"{1e3 * with_m:.1f} mm off, {1e3 * without_m:.1f} mm without feed-forward"
        )
        end(world)
    return (
        f"loaded feet {1e3 * with_m:.1f} mm from their places, without feed-forward {1e3 * without_m:.1f} mm"
    )


# ---- geometry


def foot_m(leg: Leg, angles: Sequence[float]) -> tuple[float, float, float]:
    """foot = hip + Rx(q0)[d y + Ry(q1)(-l1 z + Ry(q2)(-l2 z))], written out."""
    return _points(leg, angles)[2]


def _points(leg: Leg, angles: Sequence[float]) -> list[tuple[float, float, float]]:
    """Hip pitch axis, knee and foot, body frame."""
    roll, hip, knee = angles
    found = []
    for x, z in (
        (0.0, 0.0),
        (-leg.upper_m * math.sin(hip), -leg.upper_m * math.cos(hip)),
        (
            -leg.upper_m * math.sin(hip) - leg.lower_m * math.sin(hip + knee),
            -leg.upper_m * math.cos(hip) - leg.lower_m * math.cos(hip + knee),
        ),
    ):
        y, up = leg.abduction_m, z
        found.append(
            (
                leg.hip_m[0] + x,
                leg.hip_m[1] + y * math.cos(roll) - up * math.sin(roll),
                leg.hip_m[2] + y * math.sin(roll) + up * math.cos(roll),
            )
        )
    return found


def centre_of_mass(robot: Robot, joints_rad: Sequence[Sequence[float]]) -> tuple[float, float, float]:
    """Point masses as the description has them: links midway, the hip at its pitch axis."""
    parts = [(robot.body.mass_kg, robot.body.com_m)]
    for leg, angles in zip(robot.legs, joints_rad, strict=True):
        hip, knee, foot = _points(leg, angles)
        parts += [(leg.hip_kg, hip), (leg.upper_kg, _middle(hip, knee)), (leg.lower_kg, _middle(knee, foot))]
    total = sum(mass for mass, _ in parts)
    x, y, z = (sum(mass * place[axis] for mass, place in parts) / total for axis in range(3))
    return x, y, z


def _middle(a: Sequence[float], b: Sequence[float]) -> tuple[float, float, float]:
    x, y, z = ((p + q) / 2.0 for p, q in zip(a, b, strict=True))
    return x, y, z


def margin_m(feet: Sequence[tuple[float, float]], point: Sequence[float]) -> float:
    """From the point to the nearest edge of the feet's hull; negative outside (McGhee and Frank 1968)."""
    cx = sum(x for x, _ in feet) / len(feet)
    cy = sum(y for _, y in feet) / len(feet)
    around = sorted(feet, key=lambda foot: math.atan2(foot[1] - cy, foot[0] - cx))
    return min(
        ((bx - ax) * (point[1] - ay) - (by - ay) * (point[0] - ax)) / math.hypot(bx - ax, by - ay)
        for (ax, ay), (bx, by) in pairwise([*around, around[0]])
    )


def sagged(leg: Leg, angles: Sequence[float], load_n: float) -> list[float]:
    """The angles that loaded servos stand at: each gives by torque over stiffness, and by half its dead band.

    The ground pushes up with `load_n`, the links weigh down; their work on a
    small turn of a joint is its torque (virtual work, by differences).
    """

    def work_nm(turned: Sequence[float]) -> float:
        hip, knee, foot = _points(leg, turned)
        weight = (
            leg.hip_kg * hip[2] + leg.upper_kg * _middle(hip, knee)[2] + leg.lower_kg * _middle(knee, foot)[2]
        )
        return load_n * foot[2] - GRAVITY_M_S2 * weight

    given = []
    for index, joint in enumerate(leg.joints):
        bent = list(angles)
        bent[index] += 1e-6
        torque_nm = (work_nm(bent) - work_nm(angles)) / 1e-6
        (low_rad, low_us), (high_rad, high_us) = joint.pulse_map[0], joint.pulse_map[-1]
        half_band_rad = abs((high_rad - low_rad) / (high_us - low_us)) * joint.servo.dead_band_us / 2.0
        assert joint.servo.stiffness_nm_rad is not None
        gives_rad = torque_nm / joint.servo.stiffness_nm_rad + math.copysign(half_band_rad, torque_nm)
        given.append(angles[index] + gives_rad)
    return given
