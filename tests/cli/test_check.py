"""`hobnail check`: what it finds on the demo robots, and that it finds what is made wrong."""

from __future__ import annotations

import json
import re
from dataclasses import replace

import pytest

from hobnail.cli.check import trimmed
from hobnail.cli.main import main
from hobnail.workshop import check as module
from hobnail.workshop.check import Check, Look, check, zero_moment_margin
from robots import CONFIG, bramble, juniper
from workshop.machines import sedge

Output = pytest.CaptureFixture[str]


@pytest.fixture(scope="module")
def found() -> Check:
    return check(juniper())


def test_the_envelope_is_reached_by_the_gait_that_walking_starts_with(found: Check) -> None:
    envelope = juniper().envelope
    trot = found.gaits[0]
    assert trot.name == "trot"
    assert trot.forward_m_s == pytest.approx(envelope.forward_m_s, rel=0.02)
    assert trot.sideways_m_s == pytest.approx(envelope.sideways_m_s, rel=0.02)
    assert trot.turn_rad_s == pytest.approx(envelope.turn_rad_s, rel=0.02)


def test_no_joint_is_faster_than_its_servo_anywhere_on_the_border(found: Check) -> None:
    assert len(found.gaits) == len(juniper().gaits)
    for gait in found.gaits:
        assert len(gait.walks) == 26
        assert gait.faults == 0
        assert 0.3 < gait.joint_speed <= 1.0 + 1e-9


def test_standing_the_mass_is_well_inside_the_feet(found: Check) -> None:
    # Less than half of the shorter side of the stance, which is the best that there is.
    assert 0.03 < found.standing_margin_m <= 0.5 * 0.2


def test_a_trot_balances_in_motion_only(found: Check) -> None:
    # Two feet down at a time: the support is a line (Hildebrand 1965), no margin is positive.
    assert found.gaits[0].margin_m < 0.005


def test_the_zero_moment_point_by_hand() -> None:
    """A mass 0.2 m up that speeds up by 1 m/s^2: its point is 0.2 / 9.81 m behind it, here 20 mm
    from the feet that it has left behind."""
    every_s, height_m = 0.03, 0.2
    behind = height_m / 9.81
    feet = [(0.0, -0.1), (0.0, 0.1), (-1.0, 0.1), (-1.0, -0.1)]
    looks: list[Look] = [
        ((0.02 + behind + 0.5 * (k * every_s) ** 2, 0.0, height_m), feet) for k in (-1.0, 0.0, 1.0)
    ]
    assert zero_moment_margin(looks, every_s) == pytest.approx(-0.02, abs=1e-4)


def test_the_demo_robots_can_be_driven_as_they_are(found: Check) -> None:
    assert found.warnings == ()
    assert check(bramble()).warnings == ()


def test_a_slow_gait_that_tips_is_told(monkeypatch: pytest.MonkeyPatch) -> None:
    """No other is, as a trot always does for moments."""
    monkeypatch.setattr(module, "zero_moment_margin", lambda _looks, _every_s: -0.02)
    robot = juniper()
    (crawl,) = (gait for gait in robot.gaits if gait.name == "crawl")
    (warning,) = check(replace(robot, gaits=(robot.gaits[0], crawl))).warnings
    assert "gait crawl has three feet or more down at any time, but at its fastest tips by 20 mm" in warning


def test_a_trot_that_rocks_on_soft_servos_is_told_and_what_is_calmer(monkeypatch: pytest.MonkeyPatch) -> None:
    """Following what is told ends the warning."""
    monkeypatch.setattr(module, "_border", lambda _: [(0.1, 0.0, 0.0)])
    robot = sedge()
    gait = replace(robot.gaits[0], cycle_s=0.38)
    (warning,) = check(replace(robot, gaits=(gait,))).warnings
    assert "gait trot: on its servos' springs the body rocks by about " in warning
    told = re.search(r"with duty (\S+) and cycle_s (\S+) it would by about 0.0", warning)
    assert told
    calmer = replace(gait, duty=float(told[1]), cycle_s=float(told[2]))
    assert check(replace(robot, gaits=(calmer,))).warnings == ()


def test_slow_servos_are_told() -> None:
    robot = juniper()
    slow = replace(
        robot,
        gaits=robot.gaits[:1],
        legs=tuple(
            replace(
                leg,
                joints=tuple(  # type: ignore[arg-type]
                    replace(joint, servo=replace(joint.servo, speed_rad_s=0.3 * joint.servo.speed_rad_s))
                    for joint in leg.joints
                ),
            )
            for leg in robot.legs
        ),
    )
    slowed = check(slow)
    assert slowed.gaits[0].share < 0.9
    assert any("reaches only" in warning for warning in slowed.warnings)


def test_a_narrow_stance_has_less_margin() -> None:
    robot = replace(juniper(), gaits=juniper().gaits[:1])
    narrow = replace(robot, stance=replace(robot.stance, spread_m=-0.03))
    lost_m = check(robot).standing_margin_m - check(narrow).standing_margin_m
    assert lost_m == pytest.approx(0.03, abs=0.002)  # the line between the feet of a side moved in by so much


def test_in_words(capsys: Output) -> None:
    assert main(["check", str(CONFIG / "bramble.yaml")]) == 0
    out = capsys.readouterr().out
    assert out.startswith("bramble: ")
    for words in ("can be used", "6 legs, 18 servos on 2 board(s)", "tripod", "wave", "envelope"):
        assert words in out
    assert max(len(line) for line in out.splitlines() if not line.startswith("warning")) <= 110


def test_as_json(capsys: Output) -> None:
    assert main(["check", "--json", str(CONFIG / "bramble.yaml")]) == 0
    told = json.loads(capsys.readouterr().out)
    assert told["ok"] is True
    assert told["digest"] == bramble().digest
    assert [gait["name"] for gait in told["gaits"]] == [gait.name for gait in bramble().gaits]


def test_quick_only_reads(capsys: Output, monkeypatch: pytest.MonkeyPatch) -> None:
    def walks(_robot: object) -> Check:
        raise AssertionError("walked")

    monkeypatch.setattr(module, "check", walks)
    assert main(["check", "--quick", str(CONFIG / "juniper.yaml")]) == 0
    assert "can be used" in capsys.readouterr().out
    assert main(["check", "--quick", "--json", str(CONFIG / "juniper.yaml")]) == 0
    assert json.loads(capsys.readouterr().out)["ok"] is True


def test_problems_as_json(capsys: Output, tmp_path: object) -> None:
    assert main(["check", "--json", f"{tmp_path}/none.yaml"]) == 78
    told = json.loads(capsys.readouterr().out)
    assert told["ok"] is False
    assert told["problems"][0]["found"] == "no such file"


def test_speeds_are_those_of_the_feet_and_what_they_truly_are_is_told() -> None:
    assert trimmed(juniper()) == []
    walk = replace(juniper().walk, ahead=(0.94, 0.012, -0.02))
    first, ahead, *_ = trimmed(replace(juniper(), walk=walk))
    assert first == "  trimmed   speeds here are those of the feet; by measured walks they are truly:"
    assert ahead == "            a metre ahead by the feet: +940 mm ahead, +12 mm left, -1.1 deg"


def test_the_envelope_is_walked_by_the_feet_whatever_the_floor_makes_of_it(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    """A trim changes nothing of reach, servo speed and balance."""
    monkeypatch.setattr(module, "_border", lambda robot: [(robot.envelope.forward_m_s, 0.0, 0.0)])
    monkeypatch.setattr(module, "_warnings", lambda *_: [])
    plain = replace(juniper(), gaits=juniper().gaits[:1])
    walk = replace(juniper().walk, ahead=(0.8, 0.05, -0.1))
    assert check(replace(plain, walk=walk)).gaits[0].walks == check(plain).gaits[0].walks
