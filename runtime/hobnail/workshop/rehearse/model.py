"""The MuJoCo model of a robot, written from its configuration alone; SI units, world frame z up.

Bodies, masses and link geometry are those of `hobnail.robot`: a trunk box, and
per leg a hip, an upper and a lower link with a round foot.  A servo with
backlash gets a second joint on the same axis, free within the play.
Modelled: floor contact of feet, knees and trunk.  Not modelled: legs touching
each other or the trunk, bending links, the servos' own sampling.
A slope is a tilted gravity, so that z is always normal to the floor.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from hobnail import servo as servo_map
from hobnail.errors import DriverUnavailableError
from hobnail.robot import Leg, Robot
from hobnail.workshop.rehearse.disturbances import Disturbances

STEP_S = 0.001
GRAVITY_M_S2 = 9.81
TIP_RADIUS_M = 0.001  # a foot without a radius is a tip of this size, its end at the foot point

# Common practice, where the configuration says nothing of a servo's inside:
MECHANICAL_TIME_S = 0.006  # no-load run-up time; gives the rotor's inertia seen at the shaft
FRICTION_SHARE = 0.03  # dry friction of the gears, as a share of the stall torque

# A contact as stiff as the step allows (time constant at least twice the step); the
# elliptic cone with a high impedance ratio keeps loaded feet from creeping.
_CONTACT = 'solref="0.004 1" solimp="0.95 0.99 0.001"'
_IMPEDANCE_RATIO = 10
_SMALLEST_KG = 1e-4  # the engine needs some mass in every moving body
_SMALLEST_KG_M2 = 1e-8
_HIP_RADIUS_M = 0.02
_LINK_RADIUS_M = 0.008
_KNEE_RADIUS_M = 0.006
_BUMP_PITCH_M = 0.06
_BUMP_CELLS = 200  # a side: 12 m


@dataclass(frozen=True, slots=True)
class RobotModel:
    """The compiled model and where to find the robot's parts in it.

    `shaft_qpos`, `shaft_dof`: the servos' own joints, in the order of
    `robot.joints`.  `foot_geoms`, `lower_bodies`: one a leg.  `foot_radii_m`
    as modelled.  `robot` is the robot as it really is, disturbances included.
    """

    mujoco: Any  # mujoco.MjModel
    robot: Robot
    shaft_qpos: npt.NDArray[np.intp]
    shaft_dof: npt.NDArray[np.intp]
    play_qpos: tuple[int | None, ...]
    foot_geoms: npt.NDArray[np.intp]
    lower_bodies: npt.NDArray[np.intp]
    foot_radii_m: npt.NDArray[np.float64]
    trunk_body: int
    trunk_geom: int
    floor_geom: int


def engine() -> Any:
    """The `mujoco` module.  Raises DriverUnavailableError when it is not installed."""
    try:
        import mujoco
    except ImportError as error:
        raise DriverUnavailableError(
            "rehearsing needs the physics engine: pip install 'hobnail[physics]'"
        ) from error
    return mujoco


def build(robot: Robot, disturbances: Disturbances | None = None) -> RobotModel:
    """The model of `robot` with `disturbances` applied to it.

    Raises CommandError (from the disturbances), DriverUnavailableError.
    """
    mujoco = engine()
    disturbances = disturbances or Disturbances()
    real = disturbances.applied_to(robot)
    model = mujoco.MjModel.from_xml_string(xml(real, disturbances))
    if disturbances.roughness_m > 0.0:
        bumps = np.random.default_rng((disturbances.seed, 3))
        model.hfield_data[:] = bumps.uniform(0.0, 1.0, _BUMP_CELLS * _BUMP_CELLS)

    def joint(name: str) -> int:
        return int(mujoco.mj_name2id(model, mujoco.mjtObj.mjOBJ_JOINT, name))

    def geom(name: str) -> int:
        return int(mujoco.mj_name2id(model, mujoco.mjtObj.mjOBJ_GEOM, name))

    shafts = [joint(f"joint{i}") for i in range(len(real.joints))]
    plays = [joint(f"play{i}") for i in range(len(real.joints))]
    feet = [geom(f"foot{i}") for i in range(len(real.legs))]
    return RobotModel(
        mujoco=model,
        robot=real,
        shaft_qpos=np.array(model.jnt_qposadr[shafts], dtype=np.intp),
        shaft_dof=np.array(model.jnt_dofadr[shafts], dtype=np.intp),
        play_qpos=tuple(int(model.jnt_qposadr[i]) if i >= 0 else None for i in plays),
        foot_geoms=np.array(feet, dtype=np.intp),
        lower_bodies=np.array(model.geom_bodyid[feet], dtype=np.intp),
        foot_radii_m=np.array([foot_radius_m(leg) for leg in real.legs]),
        trunk_body=int(model.geom_bodyid[geom("trunk")]),
        trunk_geom=geom("trunk"),
        floor_geom=geom("floor"),
    )


def foot_radius_m(leg: Leg) -> float:
    """The foot's radius as modelled: a pointed foot is a small tip."""
    return max(leg.foot_radius_m, TIP_RADIUS_M)


def xml(robot: Robot, disturbances: Disturbances) -> str:
    """The model as MJCF text; `robot` is the real one (`Disturbances.applied_to`)."""
    slope, heading = disturbances.slope_rad, disturbances.slope_heading_rad
    gravity = (
        -GRAVITY_M_S2 * math.sin(slope) * math.cos(heading),
        -GRAVITY_M_S2 * math.sin(slope) * math.sin(heading),
        -GRAVITY_M_S2 * math.cos(slope),
    )
    rubber = f'friction="{disturbances.friction!r} 0 0" {_CONTACT}'
    size, com, mass = robot.body.size_m, robot.body.com_m, robot.body.mass_kg
    box_inertia = (
        mass * (size[1] ** 2 + size[2] ** 2) / 12,
        mass * (size[0] ** 2 + size[2] ** 2) / 12,
        mass * (size[0] ** 2 + size[1] ** 2) / 12,
    )
    asset, floor = "", 'type="plane" size="0 0 1"'
    if disturbances.roughness_m > 0.0:
        half = _BUMP_CELLS * _BUMP_PITCH_M / 2
        asset = (
            f'<asset><hfield name="bumps" nrow="{_BUMP_CELLS}" ncol="{_BUMP_CELLS}" '
            f'size="{half} {half} {disturbances.roughness_m!r} 0.1"/></asset>'
        )
        floor = 'type="hfield" hfield="bumps"'
    legs = "".join(_leg(robot, index, rubber) for index in range(len(robot.legs)))
    return f"""<mujoco>
<compiler inertiafromgeom="false" angle="radian"/>
<option timestep="{STEP_S}" integrator="implicitfast" cone="elliptic" impratio="{_IMPEDANCE_RATIO}"
 gravity="{_numbers(*gravity)}"/>
{asset}
<worldbody>
<geom name="floor" {floor} contype="1" conaffinity="1" {rubber}/>
<body><freejoint/>
<inertial pos="{_numbers(*com)}" mass="{max(mass, _SMALLEST_KG)!r}" diaginertia="{_inertia(*box_inertia)}"/>
<geom name="trunk" type="box" size="{_numbers(*(side / 2 for side in size))}"
 pos="{_numbers(0.0, 0.0, size[2] / 2 - robot.body.belly_m)}" contype="0" conaffinity="1" {rubber}/>
{legs}
</body>
</worldbody>
</mujoco>"""


def _leg(robot: Robot, index: int, rubber: str) -> str:
    leg = robot.legs[index]
    radius = foot_radius_m(leg)
    foot_z = -leg.lower_m + max(0.0, radius - leg.foot_radius_m)
    ball = 0.4 * leg.hip_kg * _HIP_RADIUS_M**2

    def link(mass: float, length: float) -> str:
        # A round rod of even density about its middle.
        along = mass * _LINK_RADIUS_M**2 / 2
        across = mass * (length**2 + 3 * _LINK_RADIUS_M**2) / 12
        return (
            f'<inertial pos="{_numbers(0.0, 0.0, -length / 2)}" mass="{max(mass, _SMALLEST_KG)!r}" '
            f'diaginertia="{_inertia(across, across, along)}"/>'
        )

    first = 3 * index
    return f"""
<body pos="{_numbers(*leg.hip_m)}">{_joint(robot, first, "1 0 0")}
<inertial pos="{_numbers(0.0, leg.abduction_m, 0.0)}" mass="{max(leg.hip_kg, _SMALLEST_KG)!r}"
 diaginertia="{_inertia(ball, ball, ball)}"/>
<body pos="{_numbers(0.0, leg.abduction_m, 0.0)}">{_joint(robot, first + 1, "0 1 0")}
{link(leg.upper_kg, leg.upper_m)}
<body pos="{_numbers(0.0, 0.0, -leg.upper_m)}">{_joint(robot, first + 2, "0 1 0")}
{link(leg.lower_kg, leg.lower_m)}
<geom type="sphere" size="{_KNEE_RADIUS_M}" contype="0" conaffinity="1" {rubber}/>
<geom name="foot{index}" type="sphere" size="{radius!r}" pos="{_numbers(0.0, 0.0, foot_z)}"
 contype="0" conaffinity="1" {rubber}/>
</body></body></body>"""


def _joint(robot: Robot, index: int, axis: str) -> str:
    """The servo's joint, and its play; damping is the slope of the torque-speed line."""
    joint = robot.joints[index]
    servo = joint.servo
    damping = servo.torque_nm / servo.speed_rad_s
    stops = sorted(servo_map.angle_rad(joint, pulse) for pulse in joint.pulse_limits_us)
    text = (
        f'<joint name="joint{index}" axis="{axis}" damping="{damping!r}" '
        f'armature="{damping * MECHANICAL_TIME_S!r}" frictionloss="{servo.torque_nm * FRICTION_SHARE!r}" '
        f'limited="true" range="{_numbers(*stops)}" solreflimit="0.01 1"/>'
    )
    if servo.backlash_rad > 0.0:
        half = servo.backlash_rad / 2
        text += (
            f'<joint name="play{index}" axis="{axis}" damping="0.001" limited="true" '
            f'range="{_numbers(-half, half)}" solreflimit="0.003 1" solimplimit="0.99 0.999 0.0001"/>'
        )
    return text


def _numbers(*values: float) -> str:
    return " ".join(repr(float(value)) for value in values)


def _inertia(*moments: float) -> str:
    return _numbers(*(max(moment, _SMALLEST_KG_M2) for moment in moments))
