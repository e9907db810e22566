"""Whole rehearsals: the service's machine, the controller, the driver and the physics together."""

from __future__ import annotations

import math
from dataclasses import asdict, replace
from pathlib import Path

import numpy as np
import pytest

from hobnail import load_robot
from hobnail.errors import CommandError, ConfigError, StateError
from hobnail.robot import Robot
from hobnail.workshop.rehearse import SCENARIOS, Disturbances, Scenario, rehearse, run, scenario, walking
from hobnail.workshop.rehearse.scenarios import stand, stop, walk
from hobnail.workshop.rehearse.script import load_script
from workshop.machines import burdock, thistle

CONFIG = Path(__file__).parents[2] / "config"


@pytest.fixture(scope="module", params=["juniper", "bramble"])
def robot(request: pytest.FixtureRequest) -> Robot:
    return load_robot(CONFIG / f"{request.param}.yaml")


@pytest.mark.parametrize("name", SCENARIOS)
def test_the_demo_robots_do_every_scenario_without_a_fall(robot: Robot, name: str) -> None:
    result = rehearse(robot, name)
    assert not result.fell, result.why_fell
    assert result.clamped == 0
    assert result.route_failure == ""


def test_the_same_rehearsal_gives_the_same_bits() -> None:
    robot = burdock()
    first = rehearse(robot, "random", seed=3, roughness_m=0.003, lost_frames=0.05)
    second = rehearse(robot, "random", seed=3, roughness_m=0.003, lost_frames=0.05)
    assert asdict(first) == asdict(second)
    other = rehearse(robot, "random", seed=4)
    assert other.odometry_error_m != first.odometry_error_m


def test_what_the_robot_s_own_floor_makes_of_its_steps_is_no_part_of_these_physics() -> None:
    robot = burdock()
    trimmed = replace(robot, walk=replace(robot.walk, ahead=(0.8, 0.1, -0.2)))
    plain, other = (run(each, walking(robot, 0.05, duration_s=1.0)) for each in (robot, trimmed))
    assert (plain.pose == other.pose).all()
    assert (plain.true_position_m == other.true_position_m).all()


def test_a_category_1_stop_plants_crouches_and_cuts() -> None:
    robot = burdock()
    recording = run(robot, scenario("emergency-1", robot))
    at = robot.period_s * np.arange(len(recording.time_s))
    lying = recording.true_position_m[-1, 2]
    assert recording.state[-1] == "stopped"
    assert not recording.powered[-1]
    assert lying < robot.stance.rest_height_m + 0.01
    cut_s = at[np.argmax(~recording.powered)]
    assert cut_s - 2.5 <= robot.safety.crouch_s + 2 * robot.period_s
    # Soft: the trunk is at rest height before the pulses end.
    assert recording.true_position_m[np.argmax(~recording.powered), 2] < lying + 0.01


def test_a_dead_bus_ends_in_the_service_s_own_fault() -> None:
    recording = run(burdock(), walking(burdock(), 0.05, duration_s=1.0), Disturbances(lost_frames=1.0))
    assert recording.faults == ("bus-error",)
    assert recording.state[-1] == "stopped"
    assert recording.lost_frames >= 1 + burdock().safety.bus_retries


def test_life_begins_and_ends_lying_without_pulses() -> None:
    robot = burdock()
    recording = run(robot, scenario("life", robot))
    states = list(dict.fromkeys(recording.state))
    assert states == ["off", "waking", "resting", "rising", "standing", "walking", "lowering"]
    assert recording.state[-1] == "off"
    assert not recording.powered[0]
    assert not recording.powered[-1]
    assert recording.trunk_touches[-1]


def test_a_route_ends_where_its_odometry_says_but_for_slip() -> None:
    robot = load_robot(CONFIG / "juniper.yaml")
    result = rehearse(robot, "route")
    assert result.route_failure == ""
    assert result.odometry_error_m < 0.10
    assert abs(result.odometry_error_rad) < math.radians(12.0)


def test_a_stop_in_mid_walk_leaves_the_odometry_true() -> None:
    robot = burdock()
    recording = run(
        robot, Scenario(name="s", about="", commands=(walk(0.5, 0.1, 0, 0), stand(1.63)), duration_s=3.5)
    )
    assert recording.state[-1] == "standing"
    assert not recording.walking[-1]
    assert np.all(recording.foot_force_n[-1] > 1.0)


def test_three_lines_assert_on_a_rehearsal() -> None:
    result = rehearse(load_robot(CONFIG / "juniper.yaml"), "straight", battery_shift_m=(0.005, 0, 0))
    assert not result.fell
    assert result.speed_error < 0.10
    assert result.tilt_95_rad < 0.06


class TestWrongUse:
    def test_an_unknown_scenario_names_the_known(self) -> None:
        with pytest.raises(CommandError, match="there is no scenario 'moonwalk'; there are: straight"):
            rehearse(thistle(), "moonwalk")

    def test_a_request_that_does_not_fit_the_state_is_told(self) -> None:
        bad = Scenario(name="s", about="", commands=(stop(0.1, 0), walk(0.5, 0.1, 0, 0)), duration_s=1.0)
        with pytest.raises(StateError, match="stopped"):
            run(thistle(), bad)

    def test_a_gait_that_the_robot_has_not_is_told(self) -> None:
        with pytest.raises((CommandError, KeyError), match="gallop"):
            run(thistle(), walking(thistle(), 0.1, gait="gallop", duration_s=1.0))


class TestScript:
    def write(self, folder: Path, text: str) -> Path:
        path = folder / "mine.yaml"
        path.write_text(text, encoding="utf-8")
        return path

    def test_a_command_file_becomes_a_scenario(self, tmp_path: Path) -> None:
        path = self.write(
            tmp_path,
            "duration_s: 6\n"
            "commands:\n"
            "  - {at_s: 0.5, walk: {forward_mm_s: 120, turn_deg_s: 10, pivot_mm: [100, 0]}}\n"
            "  - {at_s: 2, gait: crawl}\n"
            "  - {at_s: 3, request: stand}\n"
            "  - {at_s: 5, stop_category: 1}\n",
        )
        made = load_script(path, thistle())
        assert made.duration_s == 6.0
        assert [command.method for command in made.commands] == ["walk", "gait", "stand", "stop"]
        turn = math.radians(10)
        assert made.commands[0].twist == pytest.approx((0.12, -turn * 0.1, turn))
        assert not made.lying
        assert run(thistle(), replace(made, duration_s=0.7)).time_s[-1] == pytest.approx(0.7)

    @pytest.mark.parametrize(
        ("text", "told"),
        [
            ("commands: []\n", "duration_s"),
            ("duration_s: 6\ncommands:\n  - {at_s: 1, walk: {forward_mm_s: fast}}\n", "mine.yaml:3:"),
            ("duration_s: 6\ncommands:\n  - {at_s: 1, wlak: {}}\n", "walk"),
            ("duration_s: 6\ncommands:\n  - {at_s: 1, gait: gallop}\n", "trot, crawl"),
            ("duration_s: 6\ncommands:\n  - {at_s: 1}\n", "exactly one of"),
            ("duration_s: 6\ncommands:\n  - {at_s: 1, posture: {height_mm: 900}}\n", "height"),
            (
                "duration_s: 6\ncommands:\n  - {at_s: 2, request: stand}\n  - {at_s: 1, request: rest}\n",
                "ascending",
            ),
            ("duration_s: 6\ncommands:\n  - {at_s: 1, stop_category: 2}\n", "0 or 1"),
            ("[]\n", "a mapping"),
        ],
    )
    def test_what_is_wrong_is_told_with_its_place(self, tmp_path: Path, text: str, told: str) -> None:
        with pytest.raises(ConfigError) as error:
            load_script(self.write(tmp_path, text), thistle())
        assert told in str(error.value)

    def test_a_missing_file_is_told(self, tmp_path: Path) -> None:
        with pytest.raises(ConfigError, match="no such file"):
            load_script(tmp_path / "none.yaml", thistle())
