"""The physics of one robot: servo targets in (rad, of the shaft's joint), motion out; SI units, world frame.

The servo law, for all servos at once, each physics step:

    drive  = clip(stiffness * (error beyond half the dead band), -stall, +stall)
    torque = drive - (stall / no-load speed) * joint speed - dry friction

that is a proportional position loop on a direct-current motor; `stall` and
stiffness scale with the supply voltage.  A servo without a signal is limp: only
its friction is left.  Electric power is that of an ideal motor on the same
line, drive * (drive / stall * no-load speed - speed), never negative.

Knows nothing of pulses, boards, gaits or time-keeping; `backend` does pulses.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from hobnail.errors import HobnailError
from hobnail.robot import Joint, Robot
from hobnail.workshop.rehearse.disturbances import Disturbances
from hobnail.workshop.rehearse.model import FRICTION_SHARE, STEP_S, build, engine

Floats = npt.NDArray[np.float64]

# Error at which a servo of unknown stiffness drives with all it has; common practice.
PROPORTIONAL_BAND_RAD = 0.1
_PUSH_LASTS_S = 0.1


@dataclass(frozen=True, slots=True)
class Probe:
    """What the robot really does at one instant; world frame unless said otherwise.

    `position_m` is the body origin, `rotation` the body's axes as columns.
    `feet_m` foot centres, `foot_force_n` the floor's push along its normal,
    `foot_slip_m_s` speed of the foot's material over the floor where it touches.
    `torque_nm` the servos' shaft torque, `peak_torque_nm` the largest of each
    since the last probe, `power_w` and `mean_power_w` the electric power of all
    servos, now and averaged since the last probe.
    """

    time_s: float
    position_m: Floats
    rotation: Floats
    velocity_m_s: Floats
    joints_rad: Floats
    feet_m: Floats
    foot_force_n: Floats
    foot_slip_m_s: Floats
    torque_nm: Floats
    peak_torque_nm: Floats
    mean_power_w: float
    supply_v: float
    trunk_touches: bool


def joint_stiffness_nm_rad(joint: Joint, nominal_v: float) -> float:
    """Stiffness of the servo's position loop at the nominal supply voltage.

    A stated stiffness is taken as measured on the robot's own supply; an unknown
    one is the stall torque at that voltage over `PROPORTIONAL_BAND_RAD`.
    """
    servo = joint.servo
    if servo.stiffness_nm_rad is not None:
        return servo.stiffness_nm_rad
    return servo.torque_nm * nominal_v / servo.rated_v / PROPORTIONAL_BAND_RAD


def half_dead_band_rad(joint: Joint) -> float:
    """Half the dead band as an angle, through the slope of the pulse map as a whole."""
    (low_rad, low_us), (high_rad, high_us) = joint.pulse_map[0], joint.pulse_map[-1]
    return abs((high_rad - low_rad) / (high_us - low_us)) * joint.servo.dead_band_us / 2


class Plant:
    """One robot on the floor.  `robot` is as configured; `disturbances` make it real."""

    def __init__(self, robot: Robot, disturbances: Disturbances | None = None) -> None:
        self._mujoco = engine()
        self.disturbances = disturbances or Disturbances()
        self.model = build(robot, self.disturbances)
        self.robot = self.model.robot
        self._m = self.model.mujoco
        self._d: Any = self._mujoco.MjData(self._m)
        self.steps = 0
        joints = self.robot.joints
        nominal_v = self.robot.supply.nominal_v
        given_v = self.disturbances.supply_v
        self._open_v = nominal_v if given_v is None else given_v
        self._stiffness_nominal = np.array([joint_stiffness_nm_rad(j, nominal_v) for j in joints])
        self._stall_rated = np.array([j.servo.torque_nm for j in joints])
        self._speed_rated = np.array([j.servo.speed_rad_s for j in joints])
        self._rated_v = np.array([j.servo.rated_v for j in joints])
        self._band = np.array([half_dead_band_rad(j) for j in joints])
        self._slope = self._stall_rated / self._speed_rated  # at any voltage: both scale alike
        self._limp = np.ones(len(joints), dtype=bool)
        self._targets = np.zeros(len(joints))
        self.supply_v = self._open_v
        count = len(joints)
        self._error, self._inside, self._shaft = np.zeros(count), np.zeros(count), np.zeros(count)
        self._peak, self._work_j, self._since = np.zeros(count), 0.0, 0
        self._set_strength()

    @property
    def time_s(self) -> float:
        """Physics time."""
        return self.steps * STEP_S

    def energy_j(self) -> tuple[float, float]:
        """Mechanical energy: kinetic, and potential of weight above the world's origin."""
        m, d = self._m, self._d
        self._mujoco.mj_forward(m, d)
        self._mujoco.mj_energyPos(m, d)
        self._mujoco.mj_energyVel(m, d)
        return float(d.energy[1]), float(d.energy[0])

    def place(self, joints_rad: Sequence[float], *, clear_m: float = 0.0) -> None:
        """Put the robot level and at rest, joints as given, its lowest foot `clear_m`
        above the floor (above the highest bump of an uneven one); targets hold it there."""
        m, d, model = self._m, self._d, self.model
        self._mujoco.mj_resetData(m, d)
        d.qpos[model.shaft_qpos] = joints_rad
        self._mujoco.mj_kinematics(m, d)
        lowest = float(np.min(d.geom_xpos[model.foot_geoms, 2] - model.foot_radii_m))
        trunk = float(d.geom_xpos[model.trunk_geom, 2] - m.geom_size[model.trunk_geom, 2])
        d.qpos[2] = self.disturbances.roughness_m + clear_m - min(lowest, trunk)
        self._mujoco.mj_forward(m, d)
        self.steps = 0
        self.command(joints_rad)

    def command(self, targets_rad: Sequence[float | None]) -> None:
        """New targets of the joints as the servos understand them; None = no signal."""
        limp = np.array([target is None for target in targets_rad])
        self._targets[:] = [0.0 if target is None else target for target in targets_rad]
        if not np.array_equal(limp, self._limp):
            self._limp = limp
            self._set_strength()

    def advance(self, steps: int) -> None:
        """Let `steps` physics steps pass.

        Raises HobnailError when the engine finds the motion unstable.
        """
        m, d, step = self._m, self._d, self._mujoco.mj_step
        qpos, qvel, applied = d.qpos, d.qvel, d.qfrc_applied
        shaft_qpos, shaft_dof = self.model.shaft_qpos, self.model.shaft_dof
        error, inside, peak = self._error, self._inside, self._peak
        targets, stiffness, high, low = self._targets, self._stiffness, self._stall, -self._stall
        band, minus_band, slope, electric = self._band, -self._band, self._slope_now, 1.0 / self._slope
        pushes = self.disturbances.push_ns != (0.0, 0.0)
        for _ in range(steps):
            if pushes:
                self._push()
            np.subtract(targets, qpos[shaft_qpos], out=error)
            np.minimum(error, band, out=inside)
            np.maximum(inside, minus_band, out=inside)
            np.subtract(error, inside, out=error)
            np.multiply(error, stiffness, out=error)
            np.minimum(error, high, out=error)
            np.maximum(error, low, out=error)  # the drive
            applied[shaft_dof] = error
            speed = qvel[shaft_dof]
            np.multiply(error, electric, out=inside)
            np.subtract(inside, speed, out=inside)
            np.multiply(inside, error, out=inside)
            np.maximum(inside, 0.0, out=inside)
            self._work_j += float(inside.sum()) * STEP_S
            np.multiply(speed, slope, out=inside)
            np.subtract(error, inside, out=inside)
            np.abs(inside, out=inside)
            np.maximum(peak, inside, out=peak)
            step(m, d)
        self.steps += steps
        self._since += steps
        if d.warning[self._mujoco.mjtWarning.mjWARN_BADQACC].number:
            raise HobnailError(
                f"the physics became unstable at {self.time_s:.3f} s: check masses and servo stiffness"
            )

    def probe(self) -> Probe:
        """What the robot does now.  Starts the next interval of peaks and means, and
        lets the supply sag by what the servos drew in this one."""
        m, d, model = self._m, self._d, self.model
        self._mujoco.mj_forward(m, d)
        rotation = d.xmat[model.trunk_body].reshape(3, 3).copy()
        feet = d.geom_xpos[model.foot_geoms].copy()
        speed = d.qvel[model.shaft_dof]
        power = self._work_j / (self._since * STEP_S) if self._since else 0.0
        force, touches = self._contacts()
        # Velocity of the foot's material at its lowest point; `cvel` is about the
        # whole robot's centre of mass: (angular, linear).
        cvel = d.cvel[model.lower_bodies]
        point = feet - np.outer(model.foot_radii_m, (0.0, 0.0, 1.0))
        centre = d.subtree_com[model.trunk_body]
        velocity = cvel[:, 3:] + np.cross(cvel[:, :3], point - centre)
        slip = np.where(force > 0.0, np.hypot(velocity[:, 0], velocity[:, 1]), 0.0)
        probe = Probe(
            time_s=self.time_s,
            position_m=d.qpos[:3].copy(),
            rotation=rotation,
            velocity_m_s=d.qvel[:3].copy(),
            joints_rad=self.joints_rad(),
            feet_m=feet,
            foot_force_n=force,
            foot_slip_m_s=slip,
            torque_nm=d.qfrc_applied[model.shaft_dof] - self._slope_now * speed,
            peak_torque_nm=self._peak.copy(),
            mean_power_w=power,
            supply_v=self.supply_v,
            trunk_touches=touches,
        )
        self._peak[:] = 0.0
        self._work_j, self._since = 0.0, 0
        if self.disturbances.supply_ohm > 0.0:
            current = power / max(self.supply_v, 1.0)
            self.supply_v = max(0.1 * self._open_v, self._open_v - self.disturbances.supply_ohm * current)
            self._set_strength()
        return probe

    def joints_rad(self) -> Floats:
        """Geometric joint angles: shaft and play together."""
        angles: Floats = self._d.qpos[self.model.shaft_qpos].copy()
        for index, play in enumerate(self.model.play_qpos):
            if play is not None:
                angles[index] += self._d.qpos[play]
        return angles

    def _contacts(self) -> tuple[Floats, bool]:
        model, d = self.model, self._d
        force = np.zeros(len(model.foot_geoms))
        feet = {int(geom): index for index, geom in enumerate(model.foot_geoms)}
        wrench = np.zeros(6)
        touches = False
        for index in range(d.ncon):
            pair = {int(geom) for geom in d.contact[index].geom}
            touches |= model.trunk_geom in pair
            for geom in pair & feet.keys():
                self._mujoco.mj_contactForce(self._m, d, index, wrench)
                force[feet[geom]] += wrench[0]
        return force, touches

    def _set_strength(self) -> None:
        """Torque, stiffness and damping at the present voltage; nothing where limp."""
        ratio = self.supply_v / self._rated_v
        alive = ~self._limp
        self._stall = self._stall_rated * ratio * alive
        self._stiffness = self._stiffness_nominal * (self.supply_v / self.robot.supply.nominal_v) * alive
        # A motor without a driven bridge does not brake; what is left is the gears' friction.
        self._slope_now = self._slope * np.where(alive, 1.0, FRICTION_SHARE)
        self._m.dof_damping[self.model.shaft_dof] = self._slope_now

    def _push(self) -> None:
        disturbances = self.disturbances
        since = self._d.time - disturbances.push_at_s
        force = self._d.xfrc_applied[self.model.trunk_body]
        pushed = 0.0 <= since < _PUSH_LASTS_S
        force[:2] = np.divide(disturbances.push_ns, _PUSH_LASTS_S) if pushed else 0.0
