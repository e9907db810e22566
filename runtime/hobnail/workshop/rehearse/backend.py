"""The rehearsal's servo driver: pulses in (us), as a PWM chip sends them, into the physics; lock-step.

Keeps the contract of `hobnail_drivers.contract`, so that whatever drives the real
robot drives this one.  Pulses are rounded to the chip's counts at its true
frame rate and act from the next frame on; the servo at the end of the wire is
the real one, so a horn set wrong turns it to a wrong angle.
`advance` is the only clock.  Not modelled: when within its frame a pulse comes.
"""

from __future__ import annotations

import errno
import math
from collections.abc import Sequence

import numpy as np

from hobnail.robot import Joint, Robot
from hobnail.service.drivers import output
from hobnail.servo import JointMap
from hobnail.workshop.rehearse.model import STEP_S
from hobnail.workshop.rehearse.plant import Plant
from hobnail_drivers.contract import BoardSettings, Driver, Health, Output, Pulses
from hobnail_drivers.errors import BusError
from hobnail_drivers.registers import pre_scale, true_frame_hz

COUNTS = 4096  # of a frame


class RehearsalDriver(Driver):
    """Drives the servos of a `Plant`; `joints`, one an output, are the real ones."""

    is_model = True

    def __init__(
        self,
        boards: Sequence[BoardSettings],
        outputs: Sequence[Output],
        *,
        plant: Plant,
        joints: Sequence[Joint],
    ) -> None:
        """Raises SettingsError."""
        super().__init__(boards, outputs)
        self.plant = plant
        self.lost_frames = 0
        self._frame_hz = {
            board.name: true_frame_hz(board.oscillator_hz, pre_scale(board.oscillator_hz, board.frame_hz))
            for board in boards
        }
        self._count_us = [1e6 / (self._frame_hz[output.board] * COUNTS) for output in outputs]
        self._maps = [JointMap(joint) for joint in joints]
        self._of_board = {
            board.name: [i for i, output in enumerate(outputs) if output.board == board.name]
            for board in boards
        }
        self._luck = np.random.default_rng((plant.disturbances.seed, 4))
        self._targets: list[float | None] = [None] * len(outputs)
        # By board: the physics step at which its next frame begins, and the angles sent with it.
        self._waiting: dict[str, tuple[int, list[float | None]]] = {}

    def targets_rad(self, pulses_us: Pulses) -> list[float | None]:
        """The joint angles that the real servos understand these pulses as."""
        targets: list[float | None] = []
        for pulse, count_us, joint in zip(pulses_us, self._count_us, self._maps, strict=True):
            targets.append(None if pulse is None else joint.angle_rad(round(pulse / count_us) * count_us))
        return targets

    def advance(self, dt_s: float) -> None:
        """Let physics run on by `dt_s`, to the nearest physics step.

        Raises HobnailError when the motion becomes unstable.
        """
        plant = self.plant
        end = round((plant.time_s + dt_s) / STEP_S)
        for due, name in sorted((due, name) for name, (due, _) in self._waiting.items()):
            if due > end:
                break
            plant.advance(due - plant.steps)
            _, values = self._waiting.pop(name)
            for index, value in zip(self._of_board[name], values, strict=True):
                self._targets[index] = value
            plant.command(self._targets)
        plant.advance(end - plant.steps)

    def _open(self) -> None:
        self._release()

    def _write(self, pulses_us: Pulses) -> None:
        share = self.plant.disturbances.lost_frames
        if share and self._luck.random() < share:
            self.lost_frames += 1
            board = self.boards[0].name
            raise BusError(errno.EREMOTEIO, "no acknowledge: a frame was lost on purpose", board)
        targets = self.targets_rad(pulses_us)
        time_s = self.plant.time_s
        for name, indices in self._of_board.items():
            frame_hz = self._frame_hz[name]
            next_frame_s = math.ceil(time_s * frame_hz - 1e-6) / frame_hz
            due = math.ceil(next_frame_s / STEP_S - 1e-6)
            self._waiting[name] = (due, [targets[index] for index in indices])

    def _release(self) -> None:
        self._waiting.clear()
        self._targets = [None] * len(self.outputs)
        self.plant.command(self._targets)

    def _health(self) -> Health:
        return Health(settings_kept=True, frame_hz=dict(self._frame_hz))

    def _close(self) -> None:
        self._release()


def connect(robot: Robot, plant: Plant) -> RehearsalDriver:
    """The driver of a plant, wired as `robot` is configured; the plant has the real servos."""
    boards = [
        BoardSettings(
            name=board.name,
            bus=board.bus,
            address=board.address,
            frame_hz=board.frame_hz,
            oscillator_hz=board.oscillator_hz,
        )
        for board in robot.boards
    ]
    outputs = [output(joint) for joint in robot.joints]
    return RehearsalDriver(boards, outputs, plant=plant, joints=plant.robot.joints)
