"""Legs and whole robots as models of pinocchio (the package `pin`), an outside judge; m, kg, rad.

Built in code from `hobnail.robot`, without any of hobnail's own formulas.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import pinocchio as pin

from hobnail.robot import Leg, Robot, Vec3

FREE_FLYER = 7  # position and quaternion before the joints


def _at(x: float, y: float, z: float) -> Any:
    return pin.SE3(np.eye(3), np.array([x, y, z]))


def _point_mass(kg: float, x: float, y: float, z: float) -> Any:
    return pin.Inertia(kg, np.array([x, y, z]), np.zeros((3, 3)))


def _add_leg(model: Any, parent: int, leg: Leg) -> int:
    """Three joints and their masses; the frame of the foot."""
    d = leg.abduction_m
    roll = model.addJoint(parent, pin.JointModelRX(), _at(*leg.hip_m), f"{leg.name}.roll")
    model.appendBodyToJoint(roll, _point_mass(leg.hip_kg, 0.0, d, 0.0), pin.SE3.Identity())
    hip = model.addJoint(roll, pin.JointModelRY(), _at(0.0, d, 0.0), f"{leg.name}.hip")
    model.appendBodyToJoint(hip, _point_mass(leg.upper_kg, 0.0, 0.0, -0.5 * leg.upper_m), pin.SE3.Identity())
    knee = model.addJoint(hip, pin.JointModelRY(), _at(0.0, 0.0, -leg.upper_m), f"{leg.name}.knee")
    model.appendBodyToJoint(knee, _point_mass(leg.lower_kg, 0.0, 0.0, -0.5 * leg.lower_m), pin.SE3.Identity())
    foot = pin.Frame(f"{leg.name}.foot", knee, 0, _at(0.0, 0.0, -leg.lower_m), pin.FrameType.OP_FRAME)
    return int(model.addFrame(foot))


class LegJudge:
    """One leg, its hip where `Leg.hip_m` says."""

    def __init__(self, leg: Leg) -> None:
        self.model = pin.Model()
        self.foot_frame = _add_leg(self.model, 0, leg)
        self.data = self.model.createData()

    def foot(self, joints_rad: Sequence[float]) -> Vec3:
        """The foot point (body frame, m)."""
        pin.framesForwardKinematics(self.model, self.data, np.array(joints_rad))
        x, y, z = self.data.oMf[self.foot_frame].translation
        return float(x), float(y), float(z)


class RobotJudge:
    """A whole robot, its body held at the origin."""

    def __init__(self, robot: Robot) -> None:
        self.model = pin.Model()
        body = self.model.addJoint(0, pin.JointModelFreeFlyer(), pin.SE3.Identity(), "body")
        self.model.appendBodyToJoint(
            body, _point_mass(robot.body.mass_kg, *robot.body.com_m), pin.SE3.Identity()
        )
        self.foot_frames = [_add_leg(self.model, body, leg) for leg in robot.legs]
        self.data = self.model.createData()

    def configuration(
        self,
        joints_rad: Sequence[Sequence[float]],
        pose: Sequence[float] = (0.0, 0.0, 0.0),
        height_m: float = 0.0,
    ) -> Any:
        """A state: joints, and the level body at (x, y, yaw) and at that height."""
        x, y, yaw = pose
        q = pin.neutral(self.model)
        q[:FREE_FLYER] = x, y, height_m, 0.0, 0.0, np.sin(0.5 * yaw), np.cos(0.5 * yaw)
        q[FREE_FLYER:] = np.ravel(joints_rad)
        return q

    def difference(self, before: Any, after: Any) -> Any:
        """The motion that leads from one state to another in a second."""
        return pin.difference(self.model, before, after)

    def ground_wrench(self, state: Any, speed: Any, acceleration: Any) -> tuple[Any, Any]:
        """Force (N) and moment (N m) that the ground must give in that motion, along the body's
        axes, about the point on the ground below the body origin."""
        wrench = pin.rnea(self.model, self.data, state, speed, acceleration)[:6]
        force, moment = wrench[:3], wrench[3:]
        return force, moment + np.cross((0.0, 0.0, state[2]), force)

    def centre_of_mass(self, joints_rad: Sequence[Sequence[float]]) -> Vec3:
        """Centre of mass (body frame, m)."""
        x, y, z = pin.centerOfMass(self.model, self.data, self.configuration(joints_rad))
        return float(x), float(y), float(z)

    def foot_jacobian(self, joints_rad: Sequence[Sequence[float]], leg: int, under_m: float = 0.0) -> Any:
        """d foot / d joints of that leg, 3 by 3, along the body's axes; of the point of the lower
        link that is so far under it."""
        q = self.configuration(joints_rad)
        full = pin.computeFrameJacobian(
            self.model, self.data, q, self.foot_frames[leg], pin.ReferenceFrame.LOCAL_WORLD_ALIGNED
        )
        first = 6 + 3 * leg
        moves, turns = full[:3, first : first + 3], full[3:, first : first + 3]
        return moves + np.cross(turns, (0.0, 0.0, -under_m), axisa=0, axisc=0)

    def static_torques(self, joints_rad: Sequence[Sequence[float]]) -> Any:
        """Torques that hold the robot's own links against gravity (9.81 m/s2 down), per leg."""
        torques = pin.computeGeneralizedGravity(self.model, self.data, self.configuration(joints_rad))
        return torques[6:].reshape(-1, 3)
