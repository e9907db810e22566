"""A bench robot with horns, servos and wiring of its own, and a technician who answers by what he sees of it.

The robot is a simulated driver on a clock of its own, its servos at the end of
the wire being the real ones; the technician reads the questions, looks at the
true joint angle, and knows where servos begin to buzz.
"""

from __future__ import annotations

import math
import re
from collections.abc import Mapping
from dataclasses import replace
from typing import Any

from hobnail.robot import Joint, Robot, Span
from hobnail.service.drivers import make_driver
from hobnail.servo import JointMap
from hobnail.workshop.calibrate.bench import JointBench
from hobnail.workshop.calibrate.effects import Ask
from hobnail.workshop.calibrate.words import HIP, ROLL
from hobnail_drivers.simulated import COUNTS, SimulatedDriver

MOST_QUESTIONS = 2000


def exact_servos(robot: Robot) -> Robot:
    """The robot with servos that go where they are told, to the count."""

    def exact(joint: Joint) -> Joint:
        return replace(joint, servo=replace(joint.servo, dead_band_us=1e-6))

    legs = []
    for leg in robot.legs:
        roll, hip, knee = leg.joints
        legs.append(replace(leg, joints=(exact(roll), exact(hip), exact(knee))))
    return replace(robot, legs=tuple(legs))


class BenchRobot:
    """`believed` is what its files say, `true` each joint as it really is, by name."""

    def __init__(self, believed: Robot, true: Mapping[str, Joint]) -> None:
        self.believed = believed
        self.true = {joint.name: true.get(joint.name, joint) for joint in believed.joints}
        self.time_s = 0.0

        def driver(boards: Any, outputs: Any, *, argument: str = "") -> SimulatedDriver:
            return SimulatedDriver(
                boards, outputs, argument=argument, clock=lambda: self.time_s, history=1_000_000
            )

        made = make_driver(driver, believed)  # type: ignore[arg-type]
        assert isinstance(made, SimulatedDriver)
        self.driver = made
        self.names = [joint.name for joint in believed.joints]

    def sleep(self, seconds: float) -> None:
        """Let time pass."""
        self.time_s += seconds

    def bench(self) -> JointBench:
        """The bench that this robot is on."""
        return JointBench(self.driver, self.believed, sleep=self.sleep)

    def angle_deg(self, name: str) -> float:
        """Where a joint truly stands."""
        shaft_us = self.driver.shaft_us(self.names.index(name))
        assert shaft_us is not None, f"{name} has had no pulse"
        return math.degrees(JointMap(self.true[name]).angle_rad(shaft_us))

    def count_deg(self, name: str) -> float:
        """How far one count of its board turns a joint."""
        joint = self.true[name]
        board = next(board for board in self.believed.boards if board.name == joint.board)
        us_per_rad = max(abs(slope) for _, slope in JointMap(joint).pieces)
        return math.degrees(1e6 / (board.frame_hz * COUNTS) / us_per_rad)

    @property
    def awake(self) -> list[str]:
        """The joints that have a pulse now."""
        return [
            name for name, pulse in zip(self.names, self.driver.pulses_us, strict=True) if pulse is not None
        ]


class Technician:
    """Answers by what is seen and read; `buzz_us` is where servos begin to buzz."""

    def __init__(self, robot: BenchRobot, *, buzz_us: Span = (600.0, 2400.0)) -> None:
        self.robot = robot
        self.buzz_us = buzz_us
        self.told: list[str] = []
        self.asked: list[Ask] = []
        self.answers: list[str] = []
        self._before_deg = 0.0
        self._wanted_deg = 0.0

    def say(self, text: str) -> None:
        self.told.append(text)
        if text.startswith("Direction"):
            self._before_deg = self.robot.angle_deg(self._joint())
        if found := re.search(r"(?:, to|of \d+:) (-?[0-9.]+) deg", text):
            self._wanted_deg = float(found[1])

    def ask(self, question: Ask) -> str:
        self.asked.append(question)
        assert len(self.asked) < MOST_QUESTIONS, f"no end of questions: {self.told[-5:]}"
        answer = self._answer(question.topic)
        self.answers.append(answer)
        return answer

    def _joint(self) -> str:
        (name,) = self.robot.awake
        return name

    def _answer(self, topic: str) -> str:
        if topic == "direction":
            return self._direction()
        if topic == "trim":
            name = self._joint()
            off = self._wanted_deg - self.robot.angle_deg(name)
            return (
                "ok" if abs(off) < 0.6 * self.robot.count_deg(name) else f"{min(max(off, -10.0), 10.0):+.3f}"
            )
        if topic == "map":
            return f"is {self.robot.angle_deg(self._joint()):.3f}"
        if topic in ("limit-low", "limit-high"):
            return self._limit(topic == "limit-low")
        return "yes"

    def _direction(self) -> str:
        name = self._joint()
        grows = self.robot.angle_deg(name) > self._before_deg
        leg = next(leg for leg in self.robot.believed.legs if name.startswith(f"{leg.name}."))
        number = [joint.name for joint in leg.joints].index(name)
        if number == ROLL:
            return "outward" if grows == (leg.hip_m[1] > 0) else "inward"
        if number == HIP:
            return "backward" if grows else "forward"
        return "bends" if grows == (leg.knee > 0) else "straightens"

    def _limit(self, is_low: bool) -> str:
        pulse = next(pulse for pulse in self.robot.driver.pulses_us if pulse is not None)
        for step in (50, 10):
            if is_low and pulse - step >= self.buzz_us[0]:
                return f"-{step}"
            if not is_low and pulse + step <= self.buzz_us[1]:
                return f"+{step}"
        return "ok"


class Notebook:
    """Keeps what it is told in memory."""

    def __init__(self) -> None:
        self.kept: list[tuple[str, dict[str, Any]]] = []

    def keep(self, name: str, values: Mapping[str, Any]) -> None:
        self.kept.append((name, dict(values)))

    def joint(self, joint: Joint) -> Joint:
        """The joint with everything that was kept of it."""
        for name, values in self.kept:
            if name == joint.name:
                joint = replace(joint, **values)
        return joint
