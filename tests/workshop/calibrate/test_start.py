"""Where joints get their first pulse on the bench: last, else at rest, never in the middle; rad."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import pytest

from hobnail.controller import Controller
from hobnail.service.archive import save_posture
from hobnail.workshop.calibrate.start import start_posture
from robots import bramble, juniper

ROBOTS = pytest.mark.parametrize("robot", [juniper(), bramble()], ids=lambda robot: robot.name)


@ROBOTS
def test_nothing_being_known_they_start_at_rest(robot, tmp_path: Path) -> None:  # type: ignore[no-untyped-def]
    start = start_posture(robot, tmp_path / "run", tmp_path / "state")
    assert start.words == "the rest posture"
    tick = Controller(robot, at_rest=True).tick(robot.period_s)
    assert list(start.joints_rad.values()) == [angle for leg in tick.commanded_rad for angle in leg]
    assert list(start.joints_rad) == [joint.name for joint in robot.joints]


def test_where_the_service_left_them_they_start(tmp_path: Path) -> None:
    robot = replace(juniper(), digest="d1")
    left = [0.01 * k for k in range(12)]
    save_posture(tmp_path, robot, left)
    start = start_posture(robot, tmp_path / "run", tmp_path)
    assert start.words == "where it was last"
    assert list(start.joints_rad.values()) == left


def test_what_another_configuration_left_counts_for_nothing(tmp_path: Path) -> None:
    """After a change of trims an angle is another pulse."""
    save_posture(tmp_path, replace(juniper(), digest="d1"), [0.0] * 12)
    start = start_posture(replace(juniper(), digest="d2"), tmp_path / "run", tmp_path)
    assert start.words == "the rest posture"
