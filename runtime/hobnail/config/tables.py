"""The fields of a robot's configuration: every key with its unit, its bounds and its meaning.

Bounds are those of plausible machines, wide enough for any servo-driven robot
that a person can lift, and narrow enough to catch a slipped decimal point or
unit.  What depends on more than one value is in `hobnail.config.checks`.
"""

from __future__ import annotations

from dataclasses import replace

from hobnail.config.fields import Choice, Field, Group, Integer, Number, NumberOr, Row, Several, Text

MIN_LEGS = 4
MAX_LEGS = 16
CHANNELS = 16
_SERVO_TRAVEL = Number(-200, 200, "deg")
_PULSE = Number(200, 3500, "us")

NAME = Field("name", "name", Text(), "What it is called in messages and logs.")

PULSE_MAP = Several(Row((_SERVO_TRAVEL, _PULSE)), 2, 64, "[deg, us]")
PULSE_LIMITS = Several(_PULSE, 2, 2, "lowest, highest", ascending=True)
DIRECTION = Choice({"1": 1, "-1": -1})
TRIM = Number(-45, 45, "deg")
OSCILLATOR = Number(20, 30, "MHz")
# What a metre or a turn of the feet truly is.  Beyond these it is no trim that is wanted.
_TRUE = Number(700, 1400, "mm")
_DRIFT = Number(-300, 300, "mm")
_VEER = Number(-40, 40, "deg")
AHEAD = Row((_TRUE, _DRIFT, _VEER))
SIDEWAYS = Row((_DRIFT, _TRUE, _VEER))
TURN = Number(252, 504, "deg a turn")
_GPIO_CHIP = Text(r"(/dev/)?gpiochip[0-9]{1,3}", "a GPIO chip such as gpiochip0")
_GPIO_LINE = Integer(0, 511)


def _defaults(fields: tuple[Field, ...]) -> tuple[Field, ...]:
    """Those of the fields that legs may have in common, none of them required."""
    common = []
    for each in fields:
        if isinstance(each.kind, Group):
            common.append(
                replace(each, required=False, kind=Group(_defaults(each.kind.fields), partial=True))
            )
        elif each.inherited or not each.required:
            common.append(replace(each, required=False))
    return tuple(common)


BODY = (
    Field(
        "mass_kg", "mass_kg", Number(0.05, 50, "kg"), "Trunk with battery, board and load, without the legs."
    ),
    Field(
        "com_mm",
        "com_m",
        Several(Number(-500, 500, "mm"), 3, 3, "x, y, z"),
        "Its centre of mass.",
        required=False,
    ),
    Field(
        "size_mm",
        "size_m",
        Several(Number(5, 2000, "mm"), 3, 3, "length, width, height"),
        "Box around it.",
        required=False,
    ),
    Field("belly_mm", "belly_m", Number(0, 500, "mm"), "Hip roll axes down to the underside."),
)

SUPPLY = (
    Field("nominal_v", "nominal_v", Number(3, 30, "V"), "Voltage at the servos as a rule."),
    Field("low_v", "low_v", Number(2.5, 30, "V"), "Below this: to rest, then off.", required=False),
    Field(
        "monitor_bus", "monitor_bus", Integer(0, 63), "I2C bus of an INA219 supply monitor.", required=False
    ),
    Field(
        "monitor_address",
        "monitor_address",
        Integer(0x40, 0x4F, hexadecimal=True),
        "Its address.",
        required=False,
    ),
    Field("shunt_ohm", "shunt_ohm", Number(0.0005, 1, "ohm"), "Its shunt resistor.", required=False),
)

OUTPUT_ENABLE = (
    Field("chip", "", _GPIO_CHIP, "GPIO chip of the line that drives the board's /OE pin."),
    Field("line", "", _GPIO_LINE, "Line on that chip."),
)

BOARD = (
    NAME,
    Field("bus", "bus", Integer(0, 63), "Number of the I2C bus: 1 is /dev/i2c-1."),
    Field(
        "address",
        "address",
        Integer(0x40, 0x77, hexadecimal=True),
        "I2C address, by the board's solder bridges.",
    ),
    Field("frame_hz", "frame_hz", Number(24, 1526, "Hz"), "How often each servo gets a pulse."),
    Field("oscillator_mhz", "oscillator_hz", OSCILLATOR, "The chip's clock, if measured.", required=False),
    Field(
        "output_enable", "", Group(OUTPUT_ENABLE), "Line that drives /OE, where one is wired.", required=False
    ),
)

SERVO = (
    NAME,
    Field("speed_s_per_60deg", "speed_rad_s", Number(0.01, 2, "s/60 deg"), "No-load speed at rated_v."),
    Field("torque_kgf_cm", "torque_nm", Number(0.1, 500, "kgf cm"), "Stall torque at rated_v."),
    Field("rated_v", "rated_v", Number(3, 30, "V"), "The voltage that speed and torque are stated for."),
    Field(
        "usable_speed",
        "usable_speed",
        Number(0.1, 1),
        "Share of the no-load speed to ask for.",
        required=False,
    ),
    Field(
        "stiffness_nm_per_rad",
        "stiffness_nm_rad",
        Number(0.05, 1000, "N m/rad"),
        "Torque per angle by which the loaded servo gives; left out: no sag is compensated.",
        required=False,
    ),
    Field(
        "trail_ms",
        "trail_s",
        Number(0, 200, "ms"),
        "Time by which it trails a moving command, if measured; left out: from speed, torque and stiffness.",
        required=False,
    ),
    Field(
        "dead_band_us",
        "dead_band_us",
        Number(0, 50, "us"),
        "Change of pulse that it ignores.",
        required=False,
    ),
    Field("backlash_deg", "backlash_rad", Number(0, 10, "deg"), "Play of gears and horn.", required=False),
    Field(
        "shortest_frame_ms",
        "shortest_frame_s",
        Number(0.6, 40, "ms"),
        "Shortest time between pulses.",
        required=False,
    ),
    Field(
        "pulse_map_deg_us", "", PULSE_MAP, "Shaft angle and pulse, by ascending angle, two points or a table."
    ),
    Field("pulse_limits_us", "", PULSE_LIMITS, "Pulses that must never be left."),
)

JOINT = (
    Field("servo", "", Text(), "Name of its model in servos.", inherited=True),
    Field("board", "", Text(), "Name of its board in boards.", inherited=True),
    Field("channel", "channel", Integer(0, CHANNELS - 1), "Output of the board that it is plugged into."),
    # No default for these two: forgotten, they would throw the leg about.
    Field("direction", "direction", DIRECTION, "-1 where the shaft turns against the joint.", inherited=True),
    Field("zero_deg", "zero_rad", _SERVO_TRAVEL, "Joint angle at shaft angle 0, by design.", inherited=True),
    Field("trim_deg", "trim_rad", TRIM, "Measured error of the horn's seat.", required=False),
    Field(
        "angle_limits_deg",
        "angle_limits_rad",
        Several(_SERVO_TRAVEL, 2, 2, "lowest, highest", ascending=True),
        "Joint angles that a motion may ask for.",
        inherited=True,
    ),
    Field("pulse_map_deg_us", "", PULSE_MAP, "Instead of the servo's own.", required=False),
    Field("pulse_limits_us", "", PULSE_LIMITS, "Instead of the servo's own.", required=False),
)

JOINT_NAMES = ("roll", "hip", "knee")
LEG_DEFAULTS = "leg_defaults"

JOINTS = tuple(
    Field(name, "", Group(JOINT, inherits=f"{LEG_DEFAULTS}.joints.{name}"), note)
    for name, note in zip(
        JOINT_NAMES,
        (
            "Swings the leg sideways; positive lifts a left foot outward.",
            "Swings the leg fore and aft; positive moves the foot backwards.",
            "Bends the knee; positive moves the foot backwards.",
        ),
        strict=True,
    )
)

LEG = (
    NAME,
    Field(
        "hip_mm", "hip_m", Several(Number(-2000, 2000, "mm"), 3, 3, "x, y, z"), "Where the hip roll axis is."
    ),
    Field(
        "abduction_mm",
        "",
        Number(0, 1000, "mm"),
        "Roll axis outward to the plane in which the leg swings.",
        inherited=True,
    ),
    Field("upper_mm", "upper_m", Number(10, 1000, "mm"), "Hip pitch axis to knee axis.", inherited=True),
    Field("lower_mm", "lower_m", Number(10, 1000, "mm"), "Knee axis to the foot's centre.", inherited=True),
    Field(
        "knee_bends",
        "knee",
        Choice({"forward": 1, "backward": -1}),
        "The side to which the knee points.",
        inherited=True,
    ),
    Field("foot_radius_mm", "foot_radius_m", Number(0, 100, "mm"), "Radius of a round foot.", required=False),
    Field("hip_kg", "hip_kg", Number(0, 10, "kg"), "Mass at the hip pitch axis.", required=False),
    Field("upper_kg", "upper_kg", Number(0, 10, "kg"), "Mass of the upper link.", required=False),
    Field("lower_kg", "lower_kg", Number(0, 10, "kg"), "Mass of the lower link and foot.", required=False),
    Field("joints", "", Group(JOINTS), "The leg's three servos."),
)

KEYFRAME = (
    Field("time", "time", Number(0, 1), "Share of the swing."),
    Field("travel", "travel", Number(-0.5, 1.5), "0 at lift-off to 1 at touch-down."),
    Field("lift", "lift", Number(0, 1.5), "Share of lift_mm."),
)

GAIT = (
    NAME,
    Field("duty", "duty", Number(0.3, 0.98), "Share of the cycle that a foot stands.", required=False),
    Field(
        "phases",
        "phases",
        Several(Number(0, 0.999999), MIN_LEGS, MAX_LEGS, "one a leg, in their order"),
        "Share of the cycle at which each leg touches down.",
        required=False,
    ),
    Field(
        "cycle_s",
        "cycle_s",
        NumberOr(Number(0.1, 20, "s"), "auto"),
        "Time of one cycle; auto: the shortest that the servos can follow.",
        required=False,
    ),
    Field(
        "cycle_range_s",
        "cycle_range_s",
        Several(Number(0.1, 20, "s"), 2, 2, "shortest, longest", ascending=True),
        "Bounds of an automatic cycle.",
        required=False,
    ),
    Field("lift_mm", "lift_m", Number(1, 300, "mm"), "How high a foot is lifted.", required=False),
    Field(
        "body_shift",
        "body_shift",
        Number(0, 1),
        "How far the body moves over the support before a foot lifts.",
        required=False,
    ),
    Field(
        "swing",
        "swing",
        Several(Group(KEYFRAME), 2, 64, "keyframes"),
        "The foot's own path in the air.",
        required=False,
    ),
)

STANCE = (
    Field("height_mm", "height_m", Number(10, 2000, "mm"), "Hip roll axes above the ground, standing."),
    Field("rest_height_mm", "rest_height_m", Number(0, 2000, "mm"), "The same, lying on the belly."),
    Field(
        "spread_mm",
        "spread_m",
        Number(-500, 500, "mm"),
        "Feet further out than under the leg.",
        required=False,
    ),
    Field("forward_mm", "forward_m", Number(-500, 500, "mm"), "Feet further ahead.", required=False),
)

ENVELOPE = (
    Field("forward_m_s", "forward_m_s", Number(0.01, 5, "m/s"), "Fastest straight ahead and back."),
    Field("sideways_m_s", "sideways_m_s", Number(0.01, 5, "m/s"), "Fastest sideways."),
    Field("turn_rad_s", "turn_rad_s", Number(0.01, 10, "rad/s"), "Fastest turn on the spot."),
    Field(
        "acceleration_m_s2",
        "acceleration_m_s2",
        Number(0.02, 20, "m/s2"),
        "Fastest change of speed.",
        required=False,
    ),
    Field(
        "turn_acceleration_rad_s2",
        "turn_acceleration_rad_s2",
        Number(0.05, 50, "rad/s2"),
        "Fastest change of turn rate.",
        required=False,
    ),
)

POSTURE = (
    Field(
        "height_mm",
        "height_m",
        Several(Number(10, 2000, "mm"), 2, 2, "lowest, highest", ascending=True),
        "Heights that the body may be told to stand at.",
    ),
    Field("roll_deg", "roll_rad", Number(0, 45, "deg"), "Largest roll either way.", required=False),
    Field("pitch_deg", "pitch_rad", Number(0, 45, "deg"), "Largest pitch either way.", required=False),
    Field(
        "yaw_deg", "yaw_rad", Number(0, 60, "deg"), "Largest yaw over the feet either way.", required=False
    ),
    Field("lean_mm", "lean_m", Number(0, 300, "mm"), "Largest shift over the feet.", required=False),
    Field("rate_mm_s", "rate_m_s", Number(1, 2000, "mm/s"), "How fast the body moves there.", required=False),
    Field("rate_deg_s", "rate_rad_s", Number(1, 720, "deg/s"), "How fast it turns there.", required=False),
)

STOP_INPUT = (
    Field("chip", "chip", _GPIO_CHIP, "GPIO chip of the stop contact (normally closed)."),
    Field("line", "line", _GPIO_LINE, "Line on that chip."),
    Field("debounce_ms", "debounce_s", Number(0, 200, "ms"), "Shorter openings are ignored.", required=False),
)

SAFETY = (
    Field(
        "command_ttl_s",
        "command_ttl_s",
        Number(0.05, 10, "s"),
        "Age at which a command is zero.",
        required=False,
    ),
    Field(
        "lost_rest_s",
        "lost_rest_s",
        Number(1, 3600, "s"),
        "Commander lost so long: lie down.",
        required=False,
    ),
    Field(
        "idle_rest_s", "idle_rest_s", Number(5, 86400, "s"), "Idle so long: lie down, off.", required=False
    ),
    Field(
        "crouch_s",
        "crouch_s",
        Number(0.2, 10, "s"),
        "Controlled stop: planted, down and off within.",
        required=False,
    ),
    Field("wake_group", "wake_group", Integer(1, 48), "Servos that may start together.", required=False),
    Field(
        "wake_interval_ms",
        "wake_interval_s",
        Number(10, 2000, "ms"),
        "Time between such groups.",
        required=False,
    ),
    Field(
        "bus_retries", "bus_retries", Integer(0, 10), "Tries after a bus error before a stop.", required=False
    ),
    Field(
        "bus_stall_ms",
        "bus_stall_s",
        Number(20, 5000, "ms"),
        "Longer transfers count as stalled.",
        required=False,
    ),
    Field(
        "load_limit_s",
        "load_limit_s",
        Number(1, 600, "s"),
        "Estimated overload before a warning.",
        required=False,
    ),
    Field("stop_input", "", Group(STOP_INPUT), "An emergency stop contact.", required=False),
)

ROBOT = (
    NAME,
    Field("period_ms", "period_s", Number(2, 50, "ms"), "Control period: one tick, one pulse frame out."),
    Field("body", "", Group(BODY), "The trunk."),
    Field("supply", "", Group(SUPPLY), "The servo supply."),
    Field("boards", "", Several(Group(BOARD), 1, 16, "boards"), "The PWM boards."),
    Field("servos", "", Several(Group(SERVO), 1, 48, "models"), "The servo models in use."),
    Field(
        LEG_DEFAULTS, "", Group(_defaults(LEG), partial=True), "What all legs have in common.", required=False
    ),
    Field(
        "legs",
        "",
        Several(Group(LEG, inherits=LEG_DEFAULTS), MIN_LEGS, MAX_LEGS, "legs"),
        "The legs, in order.",
    ),
    Field("stance", "", Group(STANCE), "How it stands and rests."),
    Field("posture", "", Group(POSTURE), "How the body may move over its feet."),
    Field(
        "gaits",
        "",
        Several(Group(GAIT, short="name"), 1, 32, "gaits"),
        "The gaits; walking starts with the first.",
    ),
    Field("envelope", "", Group(ENVELOPE), "The fastest commands it is certified for."),
    Field("safety", "", Group(SAFETY), "Times and counts of states and stops.", required=False),
)
