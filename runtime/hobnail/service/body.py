"""The joints between asleep and carried by the controller: pulses in us, angles in rad, flat, per joint.

Pure.  Knows nothing of states, requests or stops: `hobnail.service.machine` says when.
"""

from __future__ import annotations

from collections.abc import Sequence
from copy import deepcopy

from hobnail.controller import Controller, Tick
from hobnail.robot import Robot
from hobnail.service.waking import Waking
from hobnail.servo import JointMap

SUPPLY_STEP = 0.005  # share by which the voltage must change before servo speeds are derated anew

Angles = tuple[float | None, ...]


class Body:
    """Joints, asleep at first, and the controller that carries them once they are awake.

    `pulses_us` and `joints_rad` are what is to be sent now, None for a joint
    without a pulse; `tick` is the controller's last one, None before the first.
    """

    pulses_us: Angles
    joints_rad: Angles
    controller: Controller
    tick: Tick | None

    def __init__(self, robot: Robot, last_joints_rad: Sequence[float] | None) -> None:
        """`last_joints_rad` is where the joints were last commanded to, None when not known."""
        self._robot = robot
        self._maps = [JointMap(joint) for joint in robot.joints]
        self._last = self._usable(last_joints_rad)
        self._supply_v = robot.supply.nominal_v
        self._waking: Waking | None = None
        # To make a controller takes ten times as long as to copy one, and more.
        self._lying = Controller(robot, at_rest=True)
        self.renew()
        self.sleep()

    @property
    def supply_v(self) -> float:
        """Voltage of the servo supply, V, by which servo speeds are derated."""
        return self._supply_v

    @supply_v.setter
    def supply_v(self, volts: float) -> None:
        if abs(volts - self._supply_v) > SUPPLY_STEP * self._supply_v:
            self._supply_v = self.controller.supply_v = volts

    @property
    def last_rad(self) -> tuple[float, ...] | None:
        """Where every joint was last commanded to; None when nothing is known."""
        return self._last

    @property
    def is_waking(self) -> bool:
        """Joints are being woken, or move to the rest posture after that."""
        return self._waking is not None

    @property
    def all_awake(self) -> bool:
        """Every joint has its pulse."""
        return None not in self.joints_rad

    def begin_waking(self) -> None:
        """Be ready to wake joint by joint, at the last posture or the rest posture."""
        self._waking = Waking(self._robot, self._last or self._rest, self._rest)

    def wake(self, dt_s: float) -> bool:
        """Go on waking by `dt_s`; True when all joints are awake and at rest."""
        waking = self._waking
        assert waking is not None
        waking.advance(dt_s)
        self.joints_rad = waking.joints_rad
        before = self._last or self._rest
        self._last = tuple(
            [old if new is None else new for old, new in zip(before, self.joints_rad, strict=True)]
        )
        self.pulses_us = tuple(
            [
                None if angle is None else joint_map.pulse_us(angle)
                for joint_map, angle in zip(self._maps, self.joints_rad, strict=True)
            ]
        )
        if waking.done:
            self._waking = None
        return waking.done

    def carry(self, dt_s: float) -> Tick:
        """One tick of the controller."""
        tick = self.tick = self.controller.tick(dt_s)
        self.joints_rad = self._last = _flat(tick)
        self.pulses_us = tick.pulses_us
        return tick

    def sleep(self) -> None:
        """No pulse any more.  The controller stays as it was: lying, after a rest."""
        self._waking = None
        self.pulses_us = self.joints_rad = (None,) * len(self._maps)
        if self.tick is not None:
            self._rest = _flat(self.tick)

    def renew(self) -> None:
        """Forget where the body was carried: a new controller, lying.  Takes a millisecond."""
        self.controller = deepcopy(self._lying, {id(self._robot): self._robot})
        self.controller.supply_v = self._supply_v
        self._rest = _flat(self.controller.tick(self._robot.period_s))
        self.tick = None

    def _usable(self, joints_rad: Sequence[float] | None) -> tuple[float, ...] | None:
        """A recorded posture, brought within what the joints can reach; None if it is not one."""
        if joints_rad is None or len(joints_rad) != len(self._maps):
            return None
        if not all(-10.0 < angle < 10.0 for angle in joints_rad):
            return None
        limits = [joint_map.reachable_rad for joint_map in self._maps]
        return tuple(
            [min(max(angle, low), high) for angle, (low, high) in zip(joints_rad, limits, strict=True)]
        )


def _flat(tick: Tick) -> tuple[float, ...]:
    return tuple([angle for leg in tick.commanded_rad for angle in leg])
