"""The rehearsal's driver keeps the contract, and its pulses are those of the real chip's driver."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import cast

import numpy as np
import pytest

from hobnail.robot import Board, Robot
from hobnail.servo import JointMap
from hobnail.workshop.rehearse.backend import RehearsalDriver, connect
from hobnail.workshop.rehearse.disturbances import Disturbances
from hobnail.workshop.rehearse.plant import Plant
from hobnail_drivers.chip_model import ModelledPca9685Driver
from hobnail_drivers.conformance import OUTPUTS, DriverContract, ManualClock
from hobnail_drivers.contract import BoardSettings, Driver, Output
from hobnail_drivers.errors import BusError
from hobnail_drivers.registers import pre_scale, true_frame_hz
from workshop.machines import burdock, thistle


class StillPlant:
    """Stands in for a plant where only the targets matter."""

    def __init__(self, joints: int) -> None:
        self.disturbances = Disturbances()
        self.steps = 0
        self.targets: list[float | None] = [None] * joints

    @property
    def time_s(self) -> float:
        return self.steps * 0.001

    def command(self, targets_rad: Sequence[float | None]) -> None:
        self.targets = list(targets_rad)

    def advance(self, steps: int) -> None:
        self.steps += steps


class TestContract(DriverContract):
    def make(self, boards: Sequence[BoardSettings], outputs: Sequence[Output]) -> Driver:
        joints = [replace(burdock().joints[0], direction=1) for _ in outputs]
        self.maps = [JointMap(joint) for joint in joints]
        return RehearsalDriver(boards, outputs, plant=cast(Plant, StillPlant(len(outputs))), joints=joints)

    def sending_us(self, driver: Driver) -> Sequence[float | None]:
        assert isinstance(driver, RehearsalDriver)
        plant = cast(StillPlant, driver.plant)
        driver.advance(0.05)  # two frames: what was written has come into force
        return [
            None if angle is None else joint.pulse_us(angle)
            for angle, joint in zip(plant.targets, self.maps, strict=True)
        ]


def test_the_suite_was_given_its_outputs() -> None:
    assert len(OUTPUTS) == 10


def with_boards(robot: Robot, frame_hz: float, oscillator_hz: float) -> Robot:
    board = Board(name="main", bus=1, address=0x40, frame_hz=frame_hz, oscillator_hz=oscillator_hz)
    return replace(robot, boards=(board,))


@pytest.mark.parametrize("frame_hz", [50.0, 200.0, 300.0])
@pytest.mark.parametrize("oscillator_hz", [24.2e6, 25.0e6, 26.7e6])
def test_servos_understand_what_the_real_driver_puts_on_the_pins(
    frame_hz: float, oscillator_hz: float, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Judge: the PCA9685 driver over the register-true chip model."""
    monkeypatch.setattr("time.sleep", lambda _: None)
    robot = with_boards(thistle(), frame_hz, oscillator_hz)
    driver = connect(robot, Plant(robot))
    clock = ManualClock()
    real = ModelledPca9685Driver(driver.boards, driver.outputs, clock=clock, sleep=clock.sleep)
    real.open()
    draw = np.random.default_rng(3)
    maps = [JointMap(joint) for joint in robot.joints]
    for _ in range(20):
        pulses = draw.uniform(600.0, 2400.0, 12)
        real.write(list(pulses))
        clock.sleep(0.1)
        widths = real.chips["main"].sending_us()
        targets = driver.targets_rad(list(pulses))
        for index, (target, joint_map) in enumerate(zip(targets, maps, strict=True)):
            width = widths[driver.outputs[index].channel]
            assert width is not None
            assert target == pytest.approx(joint_map.angle_rad(width), abs=1e-12)


def test_the_real_servo_turns_wrong_where_its_horn_sits_wrong() -> None:
    robot = burdock()
    disturbances = Disturbances(zero_error_rad=0.1, seed=4)
    plant = Plant(robot, disturbances)
    driver = connect(robot, plant)
    count_rad = 1e6 / (4096 * 200.0) * np.pi / 2000
    for index, (joint, real) in enumerate(zip(robot.joints, plant.robot.joints, strict=True)):
        wanted = joint.zero_rad + 0.2
        pulses = [1500.0] * 12
        pulses[index] = JointMap(joint).pulse_us(wanted)
        got = driver.targets_rad(pulses)[index]
        error = real.trim_rad - joint.trim_rad
        # shaft = direction * (angle - zero) + trim: a horn that sits so much ahead turns the joint back.
        assert got == pytest.approx(wanted - joint.direction * error, abs=count_rad)


def test_a_pulse_acts_from_the_next_frame_on() -> None:
    """25 MHz and 50 Hz give frames of 19.9885 ms (prescale 121)."""
    assert true_frame_hz(25e6, pre_scale(25e6, 50.0)) == pytest.approx(50.0288, abs=1e-4)
    robot = with_boards(burdock(), 50.0, 25e6)
    plant = Plant(robot)
    plant.model.mujoco.opt.gravity[:] = 0.0
    start = [joint.zero_rad for joint in robot.joints]
    plant.place(start, clear_m=5.0)
    driver = connect(robot, plant)
    driver.open()
    driver.advance(0.003)
    driver.write([JointMap(joint).pulse_us(joint.zero_rad + 0.5) for joint in robot.joints])
    driver.advance(0.016)
    assert plant.joints_rad() == pytest.approx(start, abs=1e-6)
    driver.advance(0.006)
    assert np.all(np.abs(plant.joints_rad() - start) > 1e-3)


def test_lost_frames_are_bus_errors_of_the_share_asked_for_and_change_nothing() -> None:
    robot = burdock()
    plant = Plant(robot, Disturbances(lost_frames=0.3, seed=2))
    driver = connect(robot, plant)
    driver.open()
    lost = 0
    for _ in range(1000):
        try:
            driver.write([1500.0] * 12)
        except BusError as error:
            lost += error.errno == 121
    assert lost == driver.lost_frames
    assert 250 < lost < 350
