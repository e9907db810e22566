"""Drivers by name: what is there, what is not, and what a driver is told of its robot."""

from __future__ import annotations

import importlib.metadata
from collections.abc import Iterable

import pytest

from hobnail.errors import DriverUnavailableError
from hobnail.robot import Robot
from hobnail.service.drivers import GROUP, make_driver, open_contact, open_driver, open_monitor
from hobnail.servo import pulse_us
from hobnail_drivers.simulated import SimulatedDriver
from robots import bramble, juniper


def points(*entries: tuple[str, str]) -> object:
    found = [importlib.metadata.EntryPoint(name, value, GROUP) for name, value in entries]

    def entry_points(*, group: str) -> Iterable[importlib.metadata.EntryPoint]:
        return found if group == GROUP else []

    return entry_points


def test_every_driver_of_this_package_is_found_by_name() -> None:
    # The package is installed wherever the suite runs.
    assert isinstance(open_driver("simulated", juniper()), SimulatedDriver)
    assert type(open_driver("chip-model", juniper())).__name__ == "ModelledPca9685Driver"
    assert type(open_driver("pca9685", juniper())).__name__ == "Pca9685Driver"


def test_a_driver_of_another_package_is_found_too(monkeypatch: pytest.MonkeyPatch) -> None:
    name = "hobnail_drivers.simulated:SimulatedDriver"
    monkeypatch.setattr(importlib.metadata, "entry_points", points(("theirs", name)))
    assert isinstance(open_driver("theirs", juniper()), SimulatedDriver)
    with pytest.raises(DriverUnavailableError, match="there are: theirs"):
        open_driver("simulated", juniper())


@pytest.mark.parametrize("name", ["", "Simulated", "pca", "simulated2"])
def test_a_name_that_is_not_there_is_never_another_driver(name: str) -> None:
    with pytest.raises(DriverUnavailableError, match="chip-model, pca9685, simulated"):
        open_driver(name, juniper())


@pytest.mark.parametrize("value", ["no_such_module:Driver", "hobnail_drivers.simulated:NoSuchDriver"])
def test_a_driver_that_cannot_be_loaded_says_why(value: str, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(importlib.metadata, "entry_points", points(("theirs", value)))
    with pytest.raises(DriverUnavailableError, match="theirs"):
        open_driver("theirs", juniper())


def test_not_installed_is_said(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(importlib.metadata, "entry_points", points())
    with pytest.raises(DriverUnavailableError, match="not installed"):
        open_driver("simulated", juniper())


def test_the_argument_goes_to_drivers_that_take_one(tmp_path: object) -> None:
    path = f"{tmp_path}/chips:with:colons"
    assert open_driver(f"chip-model:{path}", juniper()).argument == path
    with pytest.raises(DriverUnavailableError, match="no argument"):
        open_driver("simulated:loud", juniper())


@pytest.mark.parametrize("robot", [juniper(), bramble()], ids=lambda robot: robot.name)
def test_outputs_are_the_joints_in_order_with_their_limits(robot: Robot) -> None:
    driver = make_driver(SimulatedDriver, robot)
    assert [(out.board, out.channel) for out in driver.outputs] == [
        (joint.board, joint.channel) for joint in robot.joints
    ]
    for out, joint in zip(driver.outputs, robot.joints, strict=True):
        assert (out.min_us, out.max_us) == joint.pulse_limits_us
        # A servo at full speed for 1 ms, by the joint's own map.
        moved = pulse_us(joint, 0.001 * joint.servo.speed_rad_s) - pulse_us(joint, 0.0)
        assert out.speed_us_s == pytest.approx(abs(moved) * 1000.0, rel=1e-6)
    assert [board.address for board in driver.boards] == [board.address for board in robot.boards]


def test_no_input_in_the_configuration_is_none() -> None:
    assert open_monitor(juniper()) is None
    assert open_contact(juniper()) is None
