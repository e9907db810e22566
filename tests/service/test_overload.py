"""The load estimate against hand calculation, and the warning on times given."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from hobnail.controller import Controller
from hobnail.motion.leg import LegKinematics
from hobnail.robot import Joint, Leg, Robot
from hobnail.service.overload import CONTINUOUS_SHARE, SMOOTH_S, LoadWatch
from hobnail.service.states import State
from machine_rig import Rig
from robots import bramble, juniper


@pytest.mark.parametrize("robot", [juniper(), bramble()], ids=lambda robot: robot.name)
def test_torques_are_force_times_jacobian(robot: Robot) -> None:
    controller = Controller(robot)
    controller.walk(0.05, 0.02, 0.1)
    watch = LoadWatch(robot)
    for _ in range(100):
        tick = controller.tick(robot.period_s)
        torques = watch.torques_nm(tick)
        up = robot.mass_kg * 9.81 / sum(tick.stance)
        for index, leg in enumerate(robot.legs):
            kinematics, joints = LegKinematics(leg), np.array(tick.joints_rad[index])
            for k in range(3):
                # Virtual work, by a difference of the forward kinematics: torque = force dz/dq.
                step = np.zeros(3)
                step[k] = 1e-6
                higher = kinematics.foot(*(joints + step))[2]
                lower = kinematics.foot(*(joints - step))[2]
                expected = abs(up * (higher - lower) / 2e-6) if tick.stance[index] else 0.0
                # `feet_m` comes from the posture, not from these angles: 1e-3 of it may differ.
                assert torques[3 * index + k] == pytest.approx(expected, rel=2e-2, abs=2e-3)


def heavy(robot: Robot, limit_s: float) -> Robot:
    """With servos just too weak to stand on and on."""
    watch = LoadWatch(robot)
    most = max(watch.torques_nm(Controller(robot).tick(robot.period_s)))
    weak = 0.9 * most / CONTINUOUS_SHARE * robot.legs[0].joints[0].servo.rated_v / robot.supply.nominal_v
    legs = tuple(replace(leg, joints=weakened(leg, weak)) for leg in robot.legs)
    return replace(robot, legs=legs, safety=replace(robot.safety, load_limit_s=limit_s))


def weakened(leg: Leg, torque_nm: float) -> tuple[Joint, Joint, Joint]:
    """The joints of a leg with servos of that stall torque."""
    roll, hip, knee = (
        replace(joint, servo=replace(joint.servo, torque_nm=torque_nm)) for joint in leg.joints
    )
    return roll, hip, knee


def test_too_much_for_too_long_warns_with_the_joints_name_and_rest_cools() -> None:
    rig = Rig(heavy(juniper(), 5.0))
    rig.stand()
    # The mean square of a steady torque of 1/0.9 of the limit passes it after this time.
    passes_s = -SMOOTH_S * math.log(1.0 - 0.9**2)
    rig.go(passes_s)
    assert not rig.machine.faults.is_latched("overload")
    rig.go(5.0 + 1.0)
    assert rig.machine.faults.is_latched("overload")
    told = rig.machine.snapshot(rig.now_s)["faults"]
    assert "knee" in str(told)
    assert "estimate" in str(told)
    rig.expect(State.STANDING)  # a warning stops no work
    rig.ask("rest")
    rig.go(60.0)
    assert not rig.machine.faults.is_latched("overload")


def test_the_demo_robots_walk_without_a_warning() -> None:
    for robot in (juniper(), bramble()):
        rig = Rig(robot)
        rig.stand()
        for _ in range(8):
            rig.walk(0.1)
            rig.go(8.0)
        assert rig.machine.faults.total("overload") == 0


def test_no_pulses_no_load() -> None:
    watch = LoadWatch(juniper())
    for _ in range(10_000):
        assert watch.update(None, 0.01, 6.0) == []
