"""What a robot is: frozen data in SI units (m, s, rad, kg, N m; us for pulses only).

Body frame: origin midway between the hip roll axes, x forward, y left, z up
(ISO 8855); angles by the right-hand rule.  Nothing here reads a file, checks a
bound or computes a motion: `hobnail.config` does the first two, `hobnail.motion`
the third.
"""

from __future__ import annotations

from dataclasses import dataclass, field

Vec2 = tuple[float, float]
Vec3 = tuple[float, float, float]
Span = tuple[float, float]  # (lowest, highest)


@dataclass(frozen=True, slots=True, kw_only=True)
class Servo:
    """A servo model as its data sheet has it.

    Speed is a no-load rating and torque a stall rating, both at `rated_v`.
    `stiffness_nm_rad` is the static torque per radian of position error of the
    loaded servo; None when unknown, and then no sag is compensated.  `trail_s` is
    the time by which a moving servo trails its command, where it was measured;
    None: what the slope of the torque-speed line over the stiffness gives.
    """

    name: str
    speed_rad_s: float
    torque_nm: float
    rated_v: float
    usable_speed: float = 0.8  # share of the no-load speed that a motion may ask for
    stiffness_nm_rad: float | None = None
    trail_s: float | None = None
    dead_band_us: float = 4.0
    backlash_rad: float = 0.0
    shortest_frame_s: float = 0.003


@dataclass(frozen=True, slots=True, kw_only=True)
class Joint:
    """One servo in its place: wiring, calibration and limits.

    shaft angle = direction * (joint angle - zero_rad) + trim_rad
    pulse = pulse_map(shaft angle), piecewise linear, extended past its ends.

    `zero_rad` is the joint angle by design at shaft angle 0; `trim_rad` the
    measured error of the horn's seat; `pulse_map` pairs (shaft_rad, pulse_us)
    by ascending shaft angle; `pulse_limits_us` must never be left.
    `angle_limits_rad` bounds the joint angle that a motion may ask for.
    """

    name: str  # "left-front.roll"
    servo: Servo
    board: str
    channel: int
    direction: int = 1  # +1 or -1
    zero_rad: float = 0.0
    trim_rad: float = 0.0
    pulse_map: tuple[Vec2, ...]
    pulse_limits_us: Span
    angle_limits_rad: Span


@dataclass(frozen=True, slots=True, kw_only=True)
class Leg:
    """A roll-pitch-pitch leg.

    foot = hip + Rx(q0)[d y + Ry(q1)(-l1 z + Ry(q2)(-l2 z))], q = 0 hanging
    straight down; the foot point is the end of the lower link, the centre of a
    round foot of `foot_radius_m`.  `knee` is +1 where the knee bends towards
    +x (q2 > 0), -1 where it bends towards -x.  Link masses sit midway along
    their links; `hip_kg` sits at the hip pitch axis.
    """

    name: str
    hip_m: Vec3
    abduction_m: float  # d, signed outward: positive on the left
    upper_m: float  # l1
    lower_m: float  # l2
    knee: int
    joints: tuple[Joint, Joint, Joint]  # roll, hip pitch, knee pitch
    foot_radius_m: float = 0.0
    hip_kg: float = 0.0
    upper_kg: float = 0.0
    lower_kg: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Body:
    """The trunk with everything bolted to it: battery, board, load."""

    mass_kg: float
    com_m: Vec3 = (0.0, 0.0, 0.0)  # body frame
    size_m: Vec3 = (0.24, 0.10, 0.05)  # length, width, height of the box around it
    belly_m: float = 0.03  # how far the underside lies below the origin


@dataclass(frozen=True, slots=True, kw_only=True)
class Keyframe:
    """One instant of a swing: `time` 0..1, `travel` 0 at lift-off to 1 at touch-down,
    `lift` as a share of the gait's clearance."""

    time: float
    travel: float
    lift: float


# Up and forward at once, forward at a steady speed, and down on the spot: the travel ends
# before the swing does, so that a foot which meets the ground early does not brake.
BUILT_IN_SWING: tuple[Keyframe, ...] = (
    Keyframe(time=0.0, travel=0.0, lift=0.0),
    Keyframe(time=0.27, travel=0.214, lift=0.55),
    Keyframe(time=0.45, travel=0.5, lift=1.0),
    Keyframe(time=0.63, travel=0.786, lift=0.6),
    Keyframe(time=0.9, travel=1.0, lift=0.08),
    Keyframe(time=1.0, travel=1.0, lift=0.0),
)


@dataclass(frozen=True, slots=True, kw_only=True)
class Gait:
    """A periodic gait by duty factor and relative phases.

    `phases[i]` is the share of the cycle at which leg i (in the order of
    `Robot.legs`) touches down.  `cycle_s` None means automatic: the shortest
    within `cycle_range_s` that the servos can follow at the current command.
    `body_shift` 0..1 scales how far the body moves over the coming support.
    """

    name: str
    duty: float
    phases: tuple[float, ...]
    cycle_s: float | None = None
    cycle_range_s: Span = (0.4, 3.0)
    lift_m: float = 0.03
    body_shift: float = 0.0
    swing: tuple[Keyframe, ...] = BUILT_IN_SWING

    @property
    def clearance_m(self) -> float:
        """How high a foot gets: keyframes may go beyond `lift_m`, or stay below."""
        return self.lift_m * max(frame.lift for frame in self.swing)


@dataclass(frozen=True, slots=True, kw_only=True)
class Stance:
    """Neutral stance and rest: heights of the body origin above the ground, and how far
    the feet stand outward of (`spread_m`) and ahead of (`forward_m`) the place that
    hips and centre of mass alone would give them."""

    height_m: float
    rest_height_m: float
    spread_m: float = 0.0
    forward_m: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Envelope:
    """The certified commands: (vx/forward)^2 + (vy/sideways)^2 + (yaw_rate/turn)^2 <= 1,
    taken at the body origin; and how fast they may change."""

    forward_m_s: float
    sideways_m_s: float
    turn_rad_s: float
    acceleration_m_s2: float = 0.6
    turn_acceleration_rad_s2: float = 2.5


@dataclass(frozen=True, slots=True, kw_only=True)
class PostureLimits:
    """Bounds of the body's posture over its feet and how fast it may move there."""

    height_m: Span
    roll_rad: float = 0.2
    pitch_rad: float = 0.2
    yaw_rad: float = 0.25
    lean_m: float = 0.03
    rate_m_s: float = 0.08
    rate_rad_s: float = 0.5


@dataclass(frozen=True, slots=True, kw_only=True)
class Supply:
    """The servo supply.  Speeds scale with `nominal_v` (or the measured voltage) over
    the servo's rated voltage.  `low_v` leads to rest and off; None: not watched."""

    nominal_v: float
    low_v: float | None = None
    monitor_bus: int | None = None  # I2C bus of an INA219, if there is one
    monitor_address: int = 0x41
    shunt_ohm: float = 0.1


@dataclass(frozen=True, slots=True, kw_only=True)
class StopInput:
    """A normally-closed emergency stop contact on a GPIO line; open or broken = stop."""

    chip: str
    line: int
    debounce_s: float = 0.01


@dataclass(frozen=True, slots=True, kw_only=True)
class Safety:
    """Times and counts of the states and stops."""

    command_ttl_s: float = 0.5  # a command older than this counts as zero
    lost_rest_s: float = 30.0  # commander lost for so long: lie down
    idle_rest_s: float = 300.0  # standing without a command for so long: rest, then off
    crouch_s: float = 1.5  # category 1 stop: planted, crouched and cut within this
    wake_group: int = 1  # joints whose first pulse may fall into the same interval
    wake_interval_s: float = 0.15
    bus_retries: int = 3
    bus_stall_s: float = 0.2  # a transfer longer than this counts as stalled
    load_limit_s: float = 20.0  # estimated time above the continuous torque before a warning
    stop_input: StopInput | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Board:
    """One PWM board as wired: 16 channels on an I2C bus."""

    name: str
    bus: int
    address: int
    frame_hz: float
    oscillator_hz: float = 25_000_000.0
    output_enable: tuple[str, int] | None = None  # (gpio chip, line); drives /OE


@dataclass(frozen=True, slots=True, kw_only=True)
class WalkResponse:
    """What the robot truly does of the motion that its feet make, from measured walks.

    Of one metre ahead or to the left by the feet: (ahead m, left m, turn to the
    left rad); `turn` is the share of a turn that comes about.
    """

    ahead: Vec3 = (1.0, 0.0, 0.0)
    sideways: Vec3 = (0.0, 1.0, 0.0)
    turn: float = 1.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Robot:
    """Everything hobnail knows about one machine."""

    name: str
    period_s: float
    body: Body
    legs: tuple[Leg, ...]
    boards: tuple[Board, ...]
    gaits: tuple[Gait, ...]  # the first is the one that walking starts with
    stance: Stance
    envelope: Envelope
    posture_limits: PostureLimits
    supply: Supply
    safety: Safety = field(default_factory=Safety)
    walk: WalkResponse = field(default_factory=WalkResponse)
    source: str = ""  # the configuration file
    digest: str = ""  # SHA-256 over configuration and calibration

    @property
    def joints(self) -> tuple[Joint, ...]:
        """All joints, leg by leg: roll, hip pitch, knee pitch."""
        return tuple(joint for leg in self.legs for joint in leg.joints)

    @property
    def mass_kg(self) -> float:
        """Mass of the whole robot, legs included."""
        return self.body.mass_kg + sum(leg.hip_kg + leg.upper_kg + leg.lower_kg for leg in self.legs)

    def gait(self, name: str) -> Gait:
        """The gait of that name; KeyError when there is none."""
        for gait in self.gaits:
            if gait.name == name:
                return gait
        raise KeyError(name)
