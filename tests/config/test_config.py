"""Configuration: SI values of the demo robots, defaults, and every check between values."""

from __future__ import annotations

import hashlib
import math
import re
import subprocess
import sys
from collections.abc import Callable
from dataclasses import MISSING, fields
from pathlib import Path

import pytest

from hobnail.config import digest_on_disk, load_robot
from hobnail.config.fields import Field
from hobnail.config.tables import (
    BOARD,
    BODY,
    ENVELOPE,
    GAIT,
    JOINT,
    KEYFRAME,
    LEG,
    POSTURE,
    SAFETY,
    SERVO,
    STANCE,
    STOP_INPUT,
    SUPPLY,
)
from hobnail.errors import ConfigError
from hobnail.robot import (
    Board,
    Body,
    Envelope,
    Gait,
    Joint,
    Keyframe,
    Leg,
    PostureLimits,
    Safety,
    Servo,
    Stance,
    StopInput,
    Supply,
)

CONFIG = Path(__file__).parents[2] / "config"
CORPUS = Path(__file__).parents[1] / "corpus"
SORREL = (CORPUS / "sorrel.yaml").read_text()
BURDOCK = (CORPUS / "burdock.yaml").read_text()

Told = Callable[..., list[str]]


@pytest.fixture
def told(tmp_path: Path) -> Told:
    """The problems of a good file after replacing text in it, each starting `line:column: key path`."""

    def told(*changes: tuple[str, str], text: str = SORREL) -> list[str]:
        for old, new in changes:
            assert old in text, old
            text = text.replace(old, new, 1)
        path = tmp_path / "robot.yaml"
        path.write_text(text)
        try:
            load_robot(path)
        except ConfigError as error:
            return [str(problem).removeprefix(f"{path}:") for problem in error.problems]
        return []

    return told


@pytest.mark.parametrize("path", sorted(CONFIG.glob("*.yaml")), ids=lambda path: path.name)
def test_every_shipped_configuration_loads(path: Path) -> None:
    assert load_robot(path).name == path.stem


def test_juniper_is_as_ordered() -> None:
    robot = load_robot(CONFIG / "juniper.yaml")
    assert [leg.name for leg in robot.legs] == ["left-front", "right-front", "left-hind", "right-hind"]
    assert [leg.hip_m[:2] for leg in robot.legs] == [(0.1, 0.05), (0.1, -0.05), (-0.1, 0.05), (-0.1, -0.05)]
    for leg in robot.legs:
        assert leg.abduction_m == math.copysign(0.045, leg.hip_m[1])
        assert (leg.upper_m, leg.lower_m, leg.foot_radius_m, leg.knee) == (0.105, 0.125, 0.008, -1)
    assert robot.mass_kg == pytest.approx(2.4, abs=1e-12)
    assert len(robot.joints) == 12
    assert [joint.channel for joint in robot.joints] == list(range(12))
    assert [joint.name for joint in robot.joints[:3]] == [
        "left-front.roll",
        "left-front.hip",
        "left-front.knee",
    ]
    servo = robot.joints[0].servo
    # Common practice: 0.12 s/60 deg is 8.7266 rad/s, so 0.13 is 12/13 of that.  1 kgf cm is
    # 0.0980665 N m, exactly.
    assert servo.speed_rad_s == pytest.approx(8.7266 * 12 / 13, rel=1e-5)
    assert servo.torque_nm == pytest.approx(20 * 0.0980665, rel=1e-12)
    assert (robot.gaits[0].name, robot.gaits[0].duty) == ("trot", 0.6)
    assert (robot.envelope.forward_m_s, robot.envelope.sideways_m_s, robot.envelope.turn_rad_s) == (
        0.25,
        0.12,
        0.9,
    )


def test_units_become_si() -> None:
    robot = load_robot(CORPUS / "sorrel.yaml")
    assert robot.joints[1].zero_rad == math.radians(40)
    assert robot.joints[0].servo.shortest_frame_s == 0.003
    assert robot.joints[0].pulse_map == ((math.radians(-135), 500.0), (math.radians(135), 2500.0))
    assert robot.joints[0].pulse_limits_us == (550.0, 2450.0)
    (board,) = robot.boards
    assert (board.bus, board.address, board.oscillator_hz) == (1, 0x40, 25e6)
    trot = robot.gaits[0]
    assert (trot.cycle_s, trot.cycle_range_s, trot.lift_m) == (None, (0.4, 1.0), 0.03)
    assert (robot.period_s, robot.safety.wake_interval_s, robot.safety.wake_group) == (0.01, 0.15, 1)
    assert (robot.stance.height_m, robot.stance.rest_height_m, robot.body.belly_m) == (0.17, 0.072, 0.07)
    assert (robot.posture_limits.height_m, robot.posture_limits.rate_m_s) == ((0.12, 0.195), 0.08)
    assert (robot.posture_limits.roll_rad, robot.posture_limits.rate_rad_s) == (
        math.radians(11),
        math.radians(30),
    )


def test_bramble_is_another_machine() -> None:
    robot = load_robot(CONFIG / "bramble.yaml")
    assert (len(robot.legs), len(robot.joints), len(robot.boards)) == (6, 18, 2)
    assert {leg.knee for leg in robot.legs} == {1}
    assert [gait.name for gait in robot.gaits] == ["tripod", "wave"]
    assert {joint.board for joint in robot.joints[:9]} == {"left"}
    assert {joint.board for joint in robot.joints[9:]} == {"right"}


def test_source_and_digest_tell_the_file(tmp_path: Path) -> None:
    path = tmp_path / "juniper.yaml"
    path.write_text(SORREL)
    robot = load_robot(str(path))
    assert robot.source == str(path)
    assert robot.digest == hashlib.sha256(SORREL.encode()).hexdigest() == digest_on_disk(path)


def test_a_change_on_disk_is_seen(tmp_path: Path) -> None:
    path, beside = tmp_path / "juniper.yaml", tmp_path / "juniper.calibration.yaml"
    path.write_text(SORREL)
    seen = {digest_on_disk(path)}
    path.write_text(SORREL + "# more\n")
    seen.add(digest_on_disk(path))
    beside.write_text("version: 1\n")  # need not be good
    seen.add(digest_on_disk(str(path)))
    beside.unlink()
    path.unlink()
    seen.add(digest_on_disk(path))
    assert len(seen) == 4
    assert "" in seen


def test_what_is_left_out_has_the_default_of_the_robot(tmp_path: Path) -> None:
    text = "\n".join(line for line in SORREL.splitlines() if "wake_group" not in line and "low_v" not in line)
    text = text.replace(
        "  - name: crawl                   # one foot at a time, the body over the other three",
        "  - crawl\n  - name: trot-2\n    duty: 0.5\n    phases: [0.5, 0, 0, 0.5]",
    )
    path = tmp_path / "robot.yaml"
    path.write_text(text)
    robot = load_robot(path)
    assert robot.safety.wake_group == Safety().wake_group
    assert robot.supply.low_v is None
    crawl = robot.gait("crawl")
    assert (crawl.duty, crawl.phases, crawl.body_shift) == (0.8, (0.25, 0.75, 0.0, 0.5), 1.0)
    # What depends on the robot's size: a tenth of its height, and 9 to 30 of its pendulum times.
    pendulum_s = math.sqrt(robot.stance.height_m / 9.81)
    assert crawl.lift_m == pytest.approx(0.1 * robot.stance.height_m)
    assert crawl.cycle_range_s == pytest.approx((9.0 * pendulum_s, 30.0 * pendulum_s))
    assert robot.gait("trot-2").phases == (0.5, 0.0, 0.0, 0.5)


def test_a_leg_may_differ_from_the_defaults(tmp_path: Path) -> None:
    path = tmp_path / "robot.yaml"
    path.write_text(
        SORREL.replace(
            "knee: {channel: 2, direction: 1}",
            "knee: {channel: 15, direction: -1, zero_deg: -80}\n    upper_mm: 106",
        )
    )
    leg, other, *_ = load_robot(path).legs
    assert (leg.upper_m, other.upper_m) == (0.106, 0.105)
    knee = leg.joints[2]
    assert (knee.channel, knee.direction, knee.zero_rad) == (15, -1, math.radians(-80))
    assert knee.angle_limits_rad == other.joints[2].angle_limits_rad


def test_a_joint_may_have_its_own_map_and_limits(tmp_path: Path) -> None:
    path = tmp_path / "robot.yaml"
    own = (
        "{channel: 2, direction: 1, pulse_map_deg_us: [[-90, 600], [90, 2400]], pulse_limits_us: [650, 2350]}"
    )
    path.write_text(SORREL.replace("{channel: 2, direction: 1}", own))
    _, hip, knee = load_robot(path).legs[0].joints
    assert knee.pulse_map == ((-math.pi / 2, 600.0), (math.pi / 2, 2400.0))
    assert knee.pulse_limits_us == (650.0, 2350.0)
    assert hip.pulse_limits_us == (550.0, 2450.0)


def test_own_swing_keyframes_and_extras(tmp_path: Path) -> None:
    path = tmp_path / "robot.yaml"
    path.write_text(
        SORREL.replace(
            "    lift_mm: 20\n",
            "    lift_mm: 20\n    cycle_s: 0.5\n    body_shift: 0.25\n    swing:\n"
            "      - {time: 0, travel: 0, lift: 0}\n      - {time: 0.3, travel: -0.1, lift: 1}\n"
            "      - {time: 1, travel: 1, lift: 0}\n",
        )
        .replace("    cycle_s: auto\n    cycle_range_s: [0.4, 0.8]\n", "")
        .replace(
            "    oscillator_mhz: 25.0",
            "    output_enable: {chip: gpiochip0, line: 17}\n    oscillator_mhz: 25.0",
        )
        .replace(
            "  crouch_s: 1.5",
            "  stop_input: {chip: /dev/gpiochip0, line: 27, debounce_ms: 5}\n  crouch_s: 1.5",
        )
        .replace("  low_v: 5.2", "  low_v: 5.2\n  monitor_bus: 1\n  monitor_address: 0x45\n  shunt_ohm: 0.01")
    )
    robot = load_robot(path)
    pace = robot.gait("pace")
    assert (pace.cycle_s, pace.body_shift) == (0.5, 0.25)
    assert pace.swing[1] == Keyframe(time=0.3, travel=-0.1, lift=1.0)
    assert robot.boards[0].output_enable == ("gpiochip0", 17)
    assert robot.safety.stop_input == StopInput(chip="/dev/gpiochip0", line=27, debounce_s=0.005)
    assert (robot.supply.monitor_bus, robot.supply.monitor_address, robot.supply.shunt_ohm) == (1, 0x45, 0.01)


@pytest.mark.parametrize(
    ("table", "becomes", "made"),
    [
        (BODY, Body, set()),
        (SUPPLY, Supply, set()),
        (BOARD, Board, {"output_enable"}),
        (SERVO, Servo, set()),
        (JOINT, Joint, {"name", "servo", "board", "pulse_map", "pulse_limits_us"}),
        (LEG, Leg, {"abduction_m", "joints"}),
        (KEYFRAME, Keyframe, set()),
        (GAIT, Gait, set()),
        (STANCE, Stance, set()),
        (ENVELOPE, Envelope, set()),
        (POSTURE, PostureLimits, set()),
        (STOP_INPUT, StopInput, set()),
        (SAFETY, Safety, {"stop_input"}),
    ],
)
def test_tables_cover_the_robot(table: tuple[Field, ...], becomes: type, made: set[str]) -> None:
    """Every attribute comes from a key, and may be left out only where it has a default."""
    attributes = {each.name: each for each in fields(becomes)}
    by_attribute = {each.becomes: each for each in table if each.becomes}
    assert set(by_attribute) | made == set(attributes)
    for name, each in by_attribute.items():
        if not each.required and becomes is not Gait:  # a built-in gait brings its own numbers
            assert attributes[name].default is not MISSING, name


# One change each: what stands there instead -> where the problem is told, and a word of it.
CROSS_CHECKS = [
    ("name: right-front", "name: left-front", "legs[1].name", "left-front again"),
    ("channel: 4,", "channel: 1,", "legs[1].joints.hip.channel", "left-front.hip is plugged in there"),
    ("channel: 11,", "channel: 16,", "legs[3].joints.knee.channel", "from 0 to 15"),
    ("address: 0x40", "address: 0x70", "boards[0].address", "answer to 0x70"),
    ("address: 0x40", "address: 0x3f", "boards[0].address", "from 0x40 to 0x77"),
    (
        "servo: digital-20kg\n",
        "servo: digital-2kg\n",
        "leg_defaults.joints.roll.servo",
        "Did you mean digital-20kg?",
    ),
    ("board: main\n", "board: man\n", "leg_defaults.joints.roll.board", "Did you mean main?"),
    ("frame_hz: 100", "frame_hz: 400", "boards[0].frame_hz", "at most 333.333 Hz"),
    ("shortest_frame_ms: 3.0", "shortest_frame_ms: 15", "boards[0].frame_hz", "at most 66.6667 Hz"),
    ("frame_hz: 100 ", "frame_hz: 333 ", "", ""),
    (
        "[[-135, 500], [135, 2500]]",
        "[[-135, 2500], [135, 500]]",
        "servos[0].pulse_map_deg_us[1]",
        "direction: -1",
    ),
    (
        "[[-135, 500], [135, 2500]]",
        "[[135, 500], [-135, 2500]]",
        "servos[0].pulse_map_deg_us[1]",
        "rise in angle",
    ),
    (
        "[[-135, 500], [135, 2500]]",
        "[[-135, 500], [0, 1500], [0, 1600]]",
        "servos[0].pulse_map_deg_us[2]",
        "rise",
    ),
    (
        "[[-135, 500], [135, 2500]]",
        "[[-13.5, 500], [1.35, 2500]]",
        "servos[0].pulse_map_deg_us[1]",
        "us a degree",
    ),
    ("[[-135, 500], [135, 2500]]", "[[-135, 500]]", "servos[0].pulse_map_deg_us", "list of 2 to 64"),
    (
        "pulse_limits_us: [550, 2450]",
        "pulse_limits_us: [2450, 550]",
        "servos[0].pulse_limits_us[1]",
        "more than 2450",
    ),
    ("hip_mm: [100, 50, 0]", "hip_mm: [100, 0, 0]", "legs[0].hip_mm", "y of at least 1 mm"),
    ("hip_mm: [100, -50, 0]", "hip_mm: [100, 50, 0]", "legs[1].hip_mm", "place of another hip"),
    ("hip_mm: [100, -50, 0]", "hip_mm: [100, 50, 1]", "gaits[0].name", "as many legs on the left"),
    ("abduction_mm: 45", "abduction_mm: -45", "leg_defaults.abduction_mm", "from 0 to 1000 mm"),
    ("low_v: 5.2", "low_v: 6.0", "supply.low_v", "less than nominal_v, 6 V"),
    ("  - name: trot ", "  - name: trott ", "gaits[0].phases", "Did you mean trot?"),
    ("  - name: trot ", "  - name: tripod ", "gaits[0].name", "six legs or more"),
    ("  - name: pace ", "  - name: trot ", "gaits[2].name", "trot again"),
    ("duty: 0.6 ", "duty: 0.4 ", "gaits[0].duty", "leaves 0 of 4 feet down"),
    ("duty: 0.6 ", "duty: 0.6\n    phases: [0, 0, 0]\n    #", "gaits[0].phases", "list of 4 to 16"),
    ("duty: 0.6 ", "duty: 0.6\n    phases: [0, 0, 0, 0, 0]\n    #", "gaits[0].phases", "one for each leg"),
    ("duty: 0.6 ", "duty: 0.6\n    phases: [0, 0, 0, 1]\n    #", "gaits[0].phases[3]", "from 0 to 0.999999"),
    ("duty: 0.6 ", "phases: [0, 0.5, 0.5, 0]\n    #", "gaits[0].duty", "trot needs its own duty"),
    (
        "duty: 0.6 ",
        "duty: 0.7\n    phases: [0, 0, 0, 0.4]\n    #",
        "gaits[0].duty",
        "leaves 1 of 4 feet down",
    ),
    ("cycle_range_s: [0.4, 1.0]", "cycle_range_s: [1.0, 0.4]", "gaits[0].cycle_range_s[1]", "more than 1.0"),
    ("height_mm: 170", "height_mm: 200", "stance.height_mm", "within posture.height_mm, 120 to 195 mm"),
    ("height_mm: 170", "height_mm: 260", "stance.height_mm", "cannot reach"),
    (
        "height_mm: [120, 195]",
        "height_mm: [120, 237.5]",
        "posture.height_mm[1]",
        "its limits -155 to -10 deg",
    ),
    ("rest_height_mm: 72", "rest_height_mm: 69", "stance.rest_height_mm", "at least belly_mm, 70 mm"),
    ("rest_height_mm: 72", "rest_height_mm: 170", "stance.rest_height_mm", "less than height_mm, 170 mm"),
    ("belly_mm: 70", "belly_mm: 75", "stance.rest_height_mm", "at least belly_mm, 75 mm"),
    ("[-155, -10]", "[-145, -10]", "stance.rest_height_mm", "left-front.knee would be at"),
    ("[550, 2450]", "[2400, 2450]", "stance.height_mm", "no angle that its pulse limits"),
    ("knee_bends: backward", "knee_bends: forward", "stance.height_mm", "there is none"),
    ("knee_bends: backward", "knee_bends: backwards", "leg_defaults.knee_bends", "Did you mean backward?"),
    ("lift_mm: 30", "lift_mm: 120", "gaits[0].lift_mm", "less lift"),
    (
        "lift_mm: 30",
        "lift_mm: 80\n    swing: [{time: 0, travel: 0, lift: 0}, {time: 0.5, travel: 0.5, lift: 1.5}, "
        "{time: 1, travel: 1, lift: 0}]",
        "gaits[0].lift_mm",
        "a lift of 120 mm",
    ),
    ("roll_deg: 11", "roll_deg: 40", "posture.roll_deg", "allowed: at most "),
    ("pitch_deg: 11", "pitch_deg: 44", "posture.pitch_deg", "allowed: at most "),
    ("yaw_deg: 14", "yaw_deg: 60", "posture.yaw_deg", "allowed: at most "),
    ("lean_mm: 30", "lean_mm: 200", "posture.lean_mm", "allowed: at most "),
    ("spread_mm: 0 ", "spread_mm: -100 ", "stance.spread_mm", "own side"),
    ("com_mm: [0, 0, -15]", "com_mm: [300, 0, -15]", "stance.height_mm", "further ahead"),
    (
        "low_v: 5.2",
        "low_v: 5.2\n  monitor_bus: 1\n  monitor_address: 0x40",
        "supply.monitor_address",
        "Board main has it",
    ),
]


@pytest.mark.parametrize(("old", "new", "path", "word"), CROSS_CHECKS, ids=lambda value: value[:40])
def test_cross_check(told: Told, old: str, new: str, path: str, word: str) -> None:
    problems = told((old, new))
    if not path:
        assert problems == []
        return
    assert any(f": {path}: " in problem and word in problem for problem in problems), problems


@pytest.mark.parametrize(
    ("key", "old", "new", "more"),
    [("roll_deg", 11, 40, 1), ("pitch_deg", 11, 44, 1), ("yaw_deg", 14, 60, 2), ("lean_mm", 30, 200, 5)],
)
def test_what_a_posture_is_allowed_is_taken(told: Told, key: str, old: int, new: int, more: int) -> None:
    """The limit told in the problem is good; a little more is not."""
    (problem,) = told((f"{key}: {old}", f"{key}: {new}"))
    (limit,) = re.findall(r"at most ([0-9.]+) (?:deg|mm)\.", problem)
    assert told((f"{key}: {old}", f"{key}: {limit}")) == []
    assert told((f"{key}: {old}", f"{key}: {float(limit) + more}")) != []


@pytest.mark.parametrize(
    ("swing", "word"),
    [
        ([(0, 0, 0), (1, 1, 0)], "foot would drag"),
        ([(0.1, 0, 0), (0.5, 0, 1), (1, 1, 0)], "time 0 in"),
        ([(0, 0, 0), (0.5, 0, 1), (0.9, 1, 0)], "time 1 in"),
        ([(0, 0, 0), (0.5, 0, 1), (1, 0.9, 0)], "travel 1 in"),
        ([(0, 0.1, 0), (0.5, 0, 1), (1, 1, 0)], "travel 0 in"),
        ([(0, 0, 0.1), (0.5, 0, 1), (1, 1, 0)], "lift 0 in"),
        ([(0, 0, 0), (0.5, 0, 1), (1, 1, 0.1)], "lift 0 in"),
        ([(0, 0, 0), (1, 0, 1), (1, 1, 0)], "one before"),
    ],
)
def test_keyframes(told: Told, swing: list[tuple[float, float, float]], word: str) -> None:
    frames = ", ".join(f"{{time: {time}, travel: {travel}, lift: {lift}}}" for time, travel, lift in swing)
    (problem,) = told(("duty: 0.6 ", f"duty: 0.6\n    swing: [{frames}]\n    # "))
    assert "gaits[0].swing" in problem
    assert word in problem


def test_a_keyframe_lacks_nothing(told: Told) -> None:
    swing = "[{time: 0, travel: 0}, {time: 0.5, travel: 0, lift: 1}, {time: 1, travel: 1, lift: 0}]"
    (problem,) = told(("duty: 0.6 ", f"duty: 0.6\n    swing: {swing}\n    # "))
    assert ": gaits[0].swing[0].lift: found nothing" in problem


def test_addresses_are_unique_on_a_bus_only(told: Told) -> None:
    assert told(("address: 0x41", "address: 0x41"), text=BURDOCK) == []
    (problem,) = told(("address: 0x41", "address: 0x40"), text=BURDOCK)
    assert problem.startswith("24:14: boards[1].address: found 0x40 on bus 1")
    two_buses = BURDOCK.replace("bus: 1\n    address: 0x41", "bus: 2\n    address: 0x40")
    assert told(text=two_buses) == []


def test_pulses_must_fit_the_frame(told: Told) -> None:
    problems = told(("frame_hz: 100", "frame_hz: 330"), ("[550, 2450]", "[550, 2950]"))
    assert any(
        "servos[0].pulse_limits_us" in problem and "at most 2878.79 us" in problem for problem in problems
    )


def test_all_problems_at_once_in_the_order_of_the_file(told: Told) -> None:
    problems = told(
        ("period_ms: 10", "period_ms: 1e1"),
        ("upper_mm: 105", "uper_mm: 105"),
        ("channel: 3,", "channel: 2,"),
        ("height_mm: 170", "height_mm: 500"),
        ("duty: 0.6", "duty: .nan"),
        ("forward_m_s: 0.25", "forward_m_s: 25"),
    )
    text = "\n".join(problems)
    for path in (
        "period_ms",
        "leg_defaults.uper_mm",
        "legs[0].upper_mm",
        "legs[1].joints.roll.channel",
        "stance.height_mm",
        "gaits[0].duty",
        "envelope.forward_m_s",
    ):
        assert f": {path}: " in text, path
    lines = [int(problem.split(":")[0]) for problem in problems]
    assert lines == sorted(lines)


def test_message_is_short_and_exact(told: Told) -> None:
    problems = told(("upper_mm: 105", "uper_mm: 105"))
    assert problems[0] == (
        "40:3: leg_defaults.uper_mm: found unknown key; allowed: abduction_mm, upper_mm, lower_mm, "
        "knee_bends, foot_radius_mm, hip_kg, upper_kg, lower_kg, joints. Did you mean upper_mm?"
    )
    (range_problem,) = told(("lower_mm: 125", "lower_mm: 12500"))
    assert (
        range_problem == "41:13: leg_defaults.lower_mm: found 12500 mm; allowed: a number from 10 to 1000 mm"
    )


@pytest.mark.parametrize(
    ("written", "reason"),
    [
        ("1e1", "exponents"),
        ("010", "octal"),
        ("0x0A", "decimal number"),
        ("0:10", "base 60"),
        ("10,0", "decimal point"),
        ("1_0", "underscores"),
        (".nan", "finite"),
        ("on", "true or false"),
        ("10 ms", "unit is in the key"),
        ("'10'", "quotes"),
    ],
)
def test_yaml_surprises_are_told_with_their_reason(told: Told, written: str, reason: str) -> None:
    problems = told(("period_ms: 10 ", f"period_ms: {written} "))
    assert len(problems) == 1
    assert problems[0].startswith("5:12: period_ms: found ")
    assert reason in problems[0]


@pytest.mark.parametrize("written", ["10", "10.0", "+10", "10."])
def test_ways_to_write_a_number(told: Told, written: str) -> None:
    assert told(("period_ms: 10 ", f"period_ms: {written} ")) == []


def test_names_that_yaml_takes_for_something_else_need_quotes(told: Told) -> None:
    assert told(("name: sorrel", "name: 'no'")) == []
    (problem,) = told(("name: sorrel", "name: no"))
    assert "put it in quotes" in problem


def test_loading_needs_no_numpy() -> None:
    """The service is to be ready in three times the time of `import numpy`, which it then needs itself."""
    code = (
        "import sys; from hobnail.config import digest_on_disk, load_robot; "
        f"load_robot({str(CONFIG / 'juniper.yaml')!r}); print('numpy' in sys.modules)"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "False"
