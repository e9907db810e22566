"""What the chips' pins show of a robot, judged without asking the program; pulses in us, times in s.

Limits come from the robot's description alone: a servo's data-sheet speed and
its pulse map.  Servos are taken to stay where they are without a pulse, and to
follow a pulse as fast as they can.  Knows no states.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping

from hobnail.robot import Robot
from hobnail_drivers.pca9685_chip import Chip

SHOWN = 3  # problems kept; the first says most
LONGEST_STEP = 2  # periods that one frame may stand for (design: "clamp the step")


class Witness:
    """Looks at the pins once a tick, and at the clock when a tick begins.

    `moved_us` and `pulses` count movement and pulses since `mark`; `started`
    has (time, outputs) for each look at which outputs began to pulse.
    `may_cut`: pulses may be cut short (the scenario cuts them, not the program);
    `may_be_late_s`: by so much ticks may begin late; `missed` counts ticks that never came.
    """

    def __init__(self, robot: Robot, chips: Mapping[str, Chip], clock: Callable[[], float]) -> None:
        self.problems: list[str] = []
        self.may_cut = False
        self.may_be_late_s = 1e-6
        self.moved_us = 0.0
        self.pulses = 0
        self.missed = 0
        self.started: list[tuple[float, tuple[int, ...]]] = []
        self.now_us: list[float | None] = [None] * len(robot.joints)
        self.last_us: list[float | None] = list(self.now_us)  # where each servo was told to be last
        self.volts = robot.supply.nominal_v
        self._robot = robot
        self._chips = chips
        self._clock = clock
        self._looked_s = clock()
        self._ticked_s: float | None = None
        self._places = [(joint.board, joint.channel) for joint in robot.joints]
        self._index = {place: index for index, place in enumerate(self._places)}
        self._rose_s: dict[int, float] = {}
        # Data sheet, section 7.3.5: a frame is 4096 (PRE_SCALE + 1) periods of the oscillator.
        self._frame_s = {
            board.name: 4096 * round(board.oscillator_hz / 4096 / board.frame_hz) / board.oscillator_hz
            for board in robot.boards
        }

    # ---- once a tick

    def ticked(self, now_s: float) -> None:
        """A tick began: on time, and after the one before?"""
        before_s, period_s = self._ticked_s, self._robot.period_s
        self._ticked_s = now_s
        if before_s is None:
            return
        periods = (now_s - before_s) / period_s
        late_s = (periods - round(periods)) * period_s
        if periods < 0.5 or abs(late_s) > self.may_be_late_s:
            self._say(f"a tick came {1e3 * (now_s - before_s):.3f} ms after the one before")
        self.missed += max(0, round(periods) - 1)

    def rebase(self) -> None:
        """The clock's grid of ticks begins anew, as with a new start of the program."""
        self._ticked_s = None

    def look(self) -> None:
        """See what the pins do now, and what they did since the last look."""
        now_s = self._clock()
        since_s, self._looked_s = now_s - self._looked_s, now_s
        sent = {name: chip.sending_us() for name, chip in self._chips.items()}
        for name, chip in self._chips.items():
            self._judge_pulses(name, chip)
        started = []
        # One tick's frame, or the one frame after ticks were lost.
        period_s = self._robot.period_s
        step_s = LONGEST_STEP * period_s if since_s > 1.5 * period_s else period_s
        for index, (board, channel) in enumerate(self._places):
            new_us, old_us, last_us = sent[board][channel], self.now_us[index], self.last_us[index]
            if new_us is not None:
                if last_us is not None:
                    self._judge_step(index, new_us - last_us, step_s, began=old_us is None)
                if old_us is None:
                    started.append(index)
                self.last_us[index] = new_us
            self.now_us[index] = new_us
        if started:
            self._judge_start(now_s, started)

    def mark(self) -> None:
        """Count from here."""
        self.look()
        self.moved_us, self.pulses = 0.0, 0

    # ---- what can be asked

    @property
    def pulsing(self) -> int:
        """How many outputs are being sent pulses."""
        return sum(pulse is not None for pulse in self.now_us)

    def all_full_off(self) -> bool:
        """Every channel of every chip has its full-off bit set (data sheet, sec. 7.3.3)."""
        return all(chip.is_full_off() for chip in self._chips.values())

    def limit_us(self, index: int, step_s: float) -> float:
        """How far that output's pulse may go in `step_s`: its servo's usable speed."""
        joint = self._robot.joints[index]
        servo = joint.servo
        speed = servo.speed_rad_s * servo.usable_speed * self.volts / servo.rated_v
        slopes = [
            abs((high - low) / (to - at))
            for (at, low), (to, high) in zip(joint.pulse_map, joint.pulse_map[1:], strict=False)
        ]
        return speed * step_s * max(slopes)

    def count_us(self, index: int) -> float:
        """One count of that output's chip: two roundings of half of it."""
        return self._frame_s[self._places[index][0]] / 4096 * 1e6

    # ---- judgement

    def _judge_pulses(self, name: str, chip: Chip) -> None:
        frame_s = self._frame_s[name]
        for pulse in chip.pulses:
            index = self._index.get((name, pulse.channel))
            if index is None:
                self._say(f"board {name} channel {pulse.channel}, which nothing is wired to, pulsed")
                continue
            self.pulses += 1
            joint = self._robot.joints[index]
            low_us, high_us = joint.pulse_limits_us
            if not pulse.whole:
                if not self.may_cut:
                    self._say(f"{joint.name}: a pulse was cut after {pulse.width_us:.0f} us")
            elif not low_us - self.count_us(index) <= pulse.width_us <= high_us + self.count_us(index):
                self._say(f"{joint.name}: {pulse.width_us:.0f} us, hard limits {low_us:.0f} to {high_us:.0f}")
            gap_s = pulse.rise_s - self._rose_s.get(index, -1e9)
            if gap_s < 0.99 * frame_s:
                self._say(
                    f"{joint.name}: pulses {gap_s * 1e3:.2f} ms apart, a frame is {frame_s * 1e3:.2f} ms"
                )
            self._rose_s[index] = pulse.rise_s
        chip.pulses.clear()

    def _judge_step(self, index: int, step_us: float, step_s: float, *, began: bool) -> None:
        self.moved_us += abs(step_us)
        limit_us = self.limit_us(index, step_s) + self.count_us(index)
        if abs(step_us) > limit_us:
            what = "snapped, as it began to pulse again," if began else "moved"
            self._say(
                f"{self._robot.joints[index].name} {what} by {step_us:.1f} us in {step_s * 1e3:.0f} ms; "
                f"its servo can do {limit_us:.1f}"
            )

    def _judge_start(self, now_s: float, started: list[int]) -> None:
        safety = self._robot.safety
        self.started.append((now_s, tuple(started)))
        since_s = now_s - safety.wake_interval_s + 0.5 * self._robot.period_s
        together = sum(len(outputs) for at_s, outputs in self.started if at_s > since_s)
        if together > safety.wake_group:
            self._say(
                f"{together} servos started within {safety.wake_interval_s:g} s; {safety.wake_group} may"
            )

    def _say(self, problem: str) -> None:
        if len(self.problems) < SHOWN:
            self.problems.append(f"at {self._clock() - 1000.0:.2f} s: {problem}")
