"""The bench session over a simulated robot: made-up errors are gone, nothing else moves; rad, us."""

from __future__ import annotations

import math
from dataclasses import replace
from functools import cache
from itertools import pairwise

import pytest
from hypothesis import given
from hypothesis import strategies as st

from hobnail.controller import Controller
from hobnail.robot import Joint, Robot
from hobnail.servo import JointMap
from hobnail.workshop.calibrate.effects import Ask
from hobnail.workshop.calibrate.session import STEP_NAMES, play, session
from robots import bramble, examples, juniper
from workshop.technician import BenchRobot, Notebook, Technician, exact_servos

ROBOT = exact_servos(juniper())
NAMES = [joint.name for joint in ROBOT.joints]


@cache
def rest_rad(robot: Robot) -> dict[str, float]:
    tick = Controller(robot, at_rest=True).tick(robot.period_s)
    angles = [angle for leg in tick.commanded_rad for angle in leg]
    return dict(zip([joint.name for joint in robot.joints], angles, strict=True))


def joint_of(robot: Robot, name: str) -> Joint:
    return next(joint for joint in robot.joints if joint.name == name)


def wrong(joint: Joint, *, trim_deg: float = 0.0, flipped: bool = False, gain: float = 1.0) -> Joint:
    """The joint as it really is where its file is wrong."""
    return replace(
        joint,
        trim_rad=math.radians(trim_deg),
        direction=-joint.direction if flipped else joint.direction,
        pulse_map=tuple((shaft, 1500.0 + gain * (pulse - 1500.0)) for shaft, pulse in joint.pulse_map),
    )


def calibrated(
    bench: BenchRobot,
    names: list[str],
    technician: Technician | None = None,
    steps: tuple[str, ...] = STEP_NAMES,
) -> Notebook:
    notebook = Notebook()
    robot = bench.believed
    with bench.bench() as hardware:
        play(
            session(robot, robot, names, rest_rad(robot), steps=steps),
            hardware,
            technician or Technician(bench),
            notebook,
        )
    return notebook


def worst_deg(found: Joint, true: Joint) -> float:
    """Greatest error of the true angle over the range, whatever is asked."""
    low, high = JointMap(found).reachable_rad
    angles = [low + (high - low) * k / 50 for k in range(51)]
    return max(
        abs(math.degrees(JointMap(true).angle_rad(JointMap(found).pulse_us(angle)) - angle))
        for angle in angles
    )


@pytest.mark.parametrize("name", NAMES)
def test_a_joint_that_is_wrong_in_every_way_is_right_afterwards(name: str) -> None:
    joint = joint_of(ROBOT, name)
    true = wrong(joint, trim_deg=9.3, flipped=True, gain=0.94)
    assert worst_deg(joint, true) > 15.0
    bench = BenchRobot(ROBOT, {name: true})
    notebook = calibrated(bench, [name])
    found = notebook.joint(joint)
    assert found.direction == true.direction
    assert found.pulse_limits_us == pytest.approx((620, 2380), abs=13)
    assert worst_deg(found, true) < 0.25  # two counts of this board, 0.8 us each, are 0.2 deg
    assert bench.awake == []


@given(
    name=st.sampled_from(NAMES),
    trim_deg=st.floats(-40.0, 40.0),
    flipped=st.booleans(),
    gain=st.floats(0.9, 1.1),
)
@examples(25)
def test_any_made_up_error_is_gone(name: str, trim_deg: float, flipped: bool, gain: float) -> None:
    joint = joint_of(ROBOT, name)
    true = wrong(joint, trim_deg=trim_deg, flipped=flipped, gain=gain)
    bench = BenchRobot(ROBOT, {name: true})
    found = calibrated(bench, [name], steps=("direction", "trim", "map")).joint(joint)
    assert found.direction == true.direction
    if abs(found.trim_rad - joint.trim_rad) > 1e-9:
        assert worst_deg(found, true) < 0.3


@pytest.mark.parametrize("robot", [ROBOT, exact_servos(bramble())], ids=lambda robot: robot.name)
def test_all_joints_in_order_one_awake_at_a_time(robot: Robot) -> None:
    names = [joint.name for joint in robot.joints]
    bench = BenchRobot(robot, {})
    notebook = calibrated(bench, names)
    assert [name for name, values in notebook.kept if "trim_rad" in values] == names
    assert [name for name, values in notebook.kept if "direction" in values] == names
    woken: list[int] = []
    for frame in bench.driver.transitions:
        on = [k for k, pulse in enumerate(frame.pulses_us) if pulse is not None]
        assert len(on) <= 1
        if on and (not woken or woken[-1] != on[0]):
            woken.append(on[0])
    assert woken == list(range(len(names)))


def test_the_first_pulse_is_the_rest_posture_and_every_move_is_slow() -> None:
    name = "left-front.hip"
    bench = BenchRobot(ROBOT, {name: wrong(joint_of(ROBOT, name), trim_deg=12.0, flipped=True)})
    calibrated(bench, [name])
    number = NAMES.index(name)
    frames = [(frame.time_s, frame.pulses_us[number]) for frame in bench.driver.transitions]
    first = next(pulse for _, pulse in frames if pulse is not None)
    assert first == pytest.approx(JointMap(joint_of(ROBOT, name)).pulse_us(rest_rad(ROBOT)[name]), abs=0.5)
    assert abs(first - 1500.0) > 100.0  # nowhere near the middle
    us_per_deg = 2000.0 / 270.0
    for (_, before), (_, after) in pairwise(frames):
        if before is not None and after is not None:
            assert abs(after - before) <= 0.02 * 20.0 * us_per_deg + 0.82  # 20 deg/s, and a count


def test_no_pulse_ever_leaves_the_limits() -> None:
    """A technician who jogs outward without end is told where the limits are."""
    name = "left-front.roll"

    class Pusher(Technician):
        def _answer(self, topic: str) -> str:
            if topic in ("trim", "limit-low", "limit-high") and len(self.asked) < 200:
                return "--" if topic == "limit-low" else "++"
            return super()._answer(topic)

    bench = BenchRobot(ROBOT, {})
    technician = Pusher(bench)
    calibrated(bench, [name], technician)
    low, high = joint_of(ROBOT, name).pulse_limits_us
    sent = [pulse for frame in bench.driver.transitions for pulse in frame.pulses_us if pulse is not None]
    assert low - 0.5 <= min(sent) < low + 1.0 or high - 1.0 < max(sent) <= high + 0.5
    assert all(low - 0.5 <= pulse <= high + 0.5 for pulse in sent)
    assert any("that is as far as the pulse limits go: 550 to 2450 us" in text for text in technician.told)


class Scripted(Technician):
    """Answers from a list; the end of it is the end of input."""

    def __init__(self, robot: BenchRobot, answers: list[str]) -> None:
        super().__init__(robot)
        self.script = list(answers)

    def ask(self, question: Ask) -> str:
        self.asked.append(question)
        if not self.script:
            raise EOFError
        return self.script.pop(0)


def complete_script(name: str) -> list[str]:
    """The answers of a session from end to end."""
    bench = BenchRobot(ROBOT, {name: wrong(joint_of(ROBOT, name), trim_deg=3.0)})
    technician = Technician(bench)
    calibrated(bench, [name], technician)
    return technician.answers


def test_input_that_ends_anywhere_ends_the_pulses_and_keeps_what_was_accepted() -> None:
    name = "right-hind.knee"
    script = complete_script(name)
    whole = BenchRobot(ROBOT, {name: wrong(joint_of(ROBOT, name), trim_deg=3.0)})
    kept = calibrated(whole, [name], Scripted(whole, script)).kept
    seen = 0
    for length in range(len(script)):
        bench = BenchRobot(ROBOT, {name: wrong(joint_of(ROBOT, name), trim_deg=3.0)})
        notebook = Notebook()
        with pytest.raises(EOFError), bench.bench() as hardware:
            play(
                session(ROBOT, ROBOT, [name], rest_rad(ROBOT)),
                hardware,
                Scripted(bench, script[:length]),
                notebook,
            )
        assert bench.awake == []
        assert notebook.kept == kept[: len(notebook.kept)]
        assert len(notebook.kept) >= seen
        seen = len(notebook.kept)
    assert (seen, len(kept)) == (3, 4)  # the fourth comes of the last answer


@given(
    st.lists(
        st.text(max_size=12) | st.sampled_from(["yes", "+", "--", "ok", "is 4", "is -90", "skip", "again"])
    )
)
@examples(100)
def test_whatever_is_answered_nothing_breaks(answers: list[str]) -> None:
    bench = BenchRobot(ROBOT, {})
    notebook = Notebook()
    try:
        with bench.bench() as hardware:
            technician = Scripted(bench, ["yes", "yes", *answers])
            play(session(ROBOT, ROBOT, NAMES[:2], rest_rad(ROBOT)), hardware, technician, notebook)
    except EOFError:
        pass
    assert bench.awake == []
    for frame in bench.driver.transitions:
        assert sum(pulse is not None for pulse in frame.pulses_us) <= 1


def test_what_is_no_answer_is_told_with_what_is_allowed() -> None:
    bench = BenchRobot(ROBOT, {})
    technician = Scripted(
        bench, ["yes", "maybe", "yes", "sideways", "", "outward", "y", "is", "is 400", "+11", "x"]
    )
    with pytest.raises(EOFError):
        calibrated(bench, ["left-front.roll"], technician)
    told = "\n".join(technician.told)
    assert "'maybe' is no answer here; allowed: yes, no, skip, quit" in told
    assert "'sideways' is no answer here; allowed: outward, inward, again, nothing, other, skip, quit" in told
    assert "an empty line is no answer here" in told
    assert "'is 400': after `is` goes a number of degrees, -180 to 180" in told
    assert "'+11' is no answer here; allowed: + - ++ --, +DEGREES or -DEGREES up to 10" in told


@pytest.mark.parametrize(
    ("seen", "told"), [("nothing", "the servo supply on?"), ("other", "correct the plug")]
)
def test_a_joint_that_does_not_move_is_wired_wrong_and_nothing_is_kept(seen: str, told: str) -> None:
    bench = BenchRobot(ROBOT, {})
    technician = Scripted(bench, ["yes", "yes", seen])
    notebook = calibrated(bench, ["left-front.roll"], technician, ("direction",))
    assert notebook.kept == []
    assert any(told in text and "board main, channel 0" in text for text in technician.told)


def test_skipping_leaves_out_and_quitting_ends() -> None:
    bench = BenchRobot(ROBOT, {})
    technician = Scripted(bench, ["yes", "skip", "yes", "skip", "skip", "skip", "skip", "yes", "q"])
    notebook = calibrated(bench, NAMES[:4], technician)
    assert notebook.kept == []
    assert technician.told[-1] == "Ended."
    assert [text for text in technician.told if "left out" in text] == [
        "  left out", "  direction left out", "  trim left out", "  map left out", "  limits left out",
    ]  # fmt: skip


def test_a_typed_angle_with_the_wrong_sign_is_asked_again() -> None:
    bench = BenchRobot(ROBOT, {})
    technician = Scripted(bench, ["yes", "yes", "yes", "is 90", "is -88", "yes"])
    notebook = calibrated(bench, ["left-front.knee"], technician, ("trim",))
    assert any("90 deg is far from -90 deg" in text and "sign right?" in text for text in technician.told)
    ((_, values),) = notebook.kept
    assert math.degrees(values["trim_rad"]) == pytest.approx(-2.0, abs=1e-6)


def test_a_horn_two_teeth_off_is_to_be_seated_anew() -> None:
    name = "left-front.roll"
    bench = BenchRobot(ROBOT, {name: wrong(joint_of(ROBOT, name), trim_deg=30.0)})
    technician = Technician(bench)
    calibrated(bench, [name], technician, ("trim",))
    (text,) = [text for text in technician.told if "The horn sits wrong" in text]
    # 25 teeth of 14.4 deg: two of them are 28.8.  The leg hangs 30 deg inward of where it should.
    assert "wrong by 2 teeth of a spline of 25" in text
    assert "by 28.8 deg, outward" in text
    assert "trim left would be +1.2 deg" in text


def test_a_trim_past_what_a_file_may_hold_is_not_kept() -> None:
    bench = BenchRobot(ROBOT, {})
    technician = Scripted(bench, ["yes", "yes", "yes", "is 50"])
    notebook = calibrated(bench, ["left-front.roll"], technician, ("trim",))
    assert notebook.kept == []
    assert any("45 deg at most" in text for text in technician.told)


def test_points_that_make_no_map_are_not_kept() -> None:
    bench = BenchRobot(ROBOT, {})
    technician = Scripted(bench, ["yes", "yes", "yes", "is -13", "is -12", "is 10"])
    notebook = calibrated(bench, ["left-front.roll"], technician, ("map",))
    assert notebook.kept == []
    assert any("make no map" in text for text in technician.told)
