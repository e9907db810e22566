"""Route files: what is read, every problem at its place, the same rules for JSON, demo routes."""

from __future__ import annotations

import json
import math
from pathlib import Path

import jsonschema
import pytest
import yaml
from hypothesis import given
from hypothesis import strategies as st

from hobnail.config import load_robot
from hobnail.errors import CommandError, RouteError
from hobnail.service.route import expected_seconds, moved
from hobnail.service.route_file import load_route, schema_text, steps_from_json, steps_to_json
from hobnail.service.route_steps import ChangeGait, Move, Pose, Speed, Step, Wait

CONFIG = Path(__file__).parents[2] / "config"
JUNIPER = load_robot(CONFIG / "juniper.yaml")


def written(tmp_path: Path, text: str) -> Path:
    path = tmp_path / "route.yaml"
    path.write_text(text, encoding="utf-8")
    return path


def problems(path: Path) -> list[str]:
    with pytest.raises(RouteError) as caught:
        load_route(path, JUNIPER)
    return str(caught.value).splitlines()


def test_every_kind_of_step_in_si_units(tmp_path: Path) -> None:
    text = """
steps:
  - forward_mm: 600
    note: along the bench
  - sideways_mm: -120.5
  - turn_deg: 90
  - arc: {radius_mm: 500, turn_deg: -90}
  - wait_s: 2.5
  - posture: {height_mm: 150, roll_deg: 3, pitch_deg: -4, yaw_deg: 5, lean_mm: [10, -5]}
  - gait: crawl
  - speed_percent: 60
"""
    steps = load_route(written(tmp_path, text), JUNIPER)
    quarter = math.pi / 2
    expected: list[Step] = [
        Move(twist=(0.6, 0.0, 0.0), note="along the bench"),
        Move(twist=(0.0, -0.1205, 0.0)),
        Move(twist=(0.0, 0.0, quarter)),
        Move(twist=(0.5 * quarter, 0.0, -quarter)),
        Wait(duration_s=2.5),
        Pose(
            height_m=0.15,
            roll_rad=math.radians(3),
            pitch_rad=math.radians(-4),
            yaw_rad=math.radians(5),
            lean_m=(0.01, -0.005),
        ),
        ChangeGait(name="crawl"),
        Speed(share=0.6),
    ]
    assert list(steps) == expected


def test_an_arc_ends_where_a_circle_does(tmp_path: Path) -> None:
    # A quarter of a circle of radius r to the right: r ahead, r to the right.
    (arc,) = load_route(written(tmp_path, "steps:\n  - arc: {radius_mm: 500, turn_deg: -90}\n"))
    assert isinstance(arc, Move)
    assert moved((0.0, 0.0, 0.0), arc.twist) == pytest.approx((0.5, -0.5, -math.pi / 2))


def test_all_problems_at_once_each_with_its_place(tmp_path: Path) -> None:
    text = """steps:
  - forward_mm: 6e2
  - fowrard_mm: 600
  - turn_deg: 90
    wait_s: 1
  - note: nothing to do
  - posture: {height_mm: 400}
  - gait: gallop
  - speed_percent: 0
  - arc: {radius_mm: 500}
"""
    path = written(tmp_path, text)
    found = problems(path)
    places = [line.removeprefix(f"{path}:").split(": ")[:2] for line in found]
    assert places == [
        ["2:17", "steps[0].forward_mm"],
        ["3:5", "steps[1].fowrard_mm"],
        ["4:5", "steps[2]"],
        ["6:5", "steps[3]"],
        ["7:26", "steps[4].posture.height_mm"],
        ["8:11", "steps[5].gait"],
        ["9:20", "steps[6].speed_percent"],
        ["10:10", "steps[7].arc.turn_deg"],
    ]
    for line, words in zip(
        found,
        [
            "found 6e2; allowed: a number from -20000 to 20000 mm. Readers of YAML differ on exponents",
            "Did you mean forward_mm?",
            "found turn_deg and wait_s; allowed: exactly one of forward_mm",
            "found no action",
            "found height 400 mm; allowed: 120 to 195 mm, for juniper",
            "found gait gallop; allowed: trot or crawl or pace or amble, for juniper",
            "found 0 %; allowed: a number from 5 to 100 %",
            "found nothing; allowed: a number from -3600 to 3600 deg",
        ],
        strict=True,
    ):
        assert words in line


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("", "an empty file"),
        ("- forward_mm: 3\n", "a list of 1"),
        ("steps: []\n", "a list of 0"),
        ("steps:\n  forward_mm: 3\n", "a mapping"),
        ("steps:\n  - forward_mm: 3\n    forward_mm: 4\n", "a second forward_mm"),
        ("steps:\n\t- forward_mm: 3\n", "a tab"),
        ("steps:\n  - wait_s: 12:30\n", "base 60"),
        ("steps:\n  - turn_deg: on\n", "true or false"),
        ("steps:\n  - forward_mm: 010\n", "octal"),
        ("steps:\n  - forward_mm: .nan\n", "Only finite numbers"),
        ("steps:\n  - forward_mm: 99999999\n", "from -20000 to 20000 mm"),
        ("steps:\n  - forward_mm: 300 mm\n", "its unit is in the key"),
        ("steps:\n  - posture: {}\n", "an empty mapping"),
        ("steps:\n  - posture: {lean_mm: [25, 25]}\n", "a lean of 35.36 mm"),
        ("steps:\n  - posture: {yaw_deg: -20}\n", "yaw -20 deg"),
        ('steps:\n  - wait_s: 1\n    note: "\\e[2J"\n', "text of 1 to 60 characters"),
        ("steps: [\n", "YAML"),
        ("steps: &a [*a]\n", "anchor"),
        ("steps:\n" + "  - wait_s: 0\n" * 1001, "a list of 1001"),
    ],
)
def test_what_is_no_route_is_refused(tmp_path: Path, text: str, words: str) -> None:
    assert words in "\n".join(problems(written(tmp_path, text)))


def test_a_missing_file_and_a_directory_are_told(tmp_path: Path) -> None:
    assert "no such file" in problems(tmp_path / "none.yaml")[0]
    assert "a directory" in problems(tmp_path)[0]


def test_without_a_robot_only_the_form_is_checked(tmp_path: Path) -> None:
    path = written(tmp_path, "steps:\n  - gait: gallop\n  - posture: {height_mm: 400}\n")
    assert load_route(path) == (ChangeGait(name="gallop"), Pose(height_m=0.4))


coordinates = st.floats(-20.0, 20.0)
angles = st.floats(-60.0, 60.0)
notes = st.one_of(
    st.just(""), st.text(st.characters(min_codepoint=32, max_codepoint=126), min_size=1, max_size=60)
)
steps_of_any_kind = st.one_of(
    st.builds(lambda x, note: Move(twist=(x, 0.0, 0.0), note=note), coordinates, notes),
    st.builds(lambda y, note: Move(twist=(0.0, y, 0.0), note=note), coordinates, notes),
    st.builds(lambda w, note: Move(twist=(0.0, 0.0, w), note=note), angles, notes),
    st.builds(
        lambda r, w, note: Move(twist=(r * abs(w), 0.0, w), note=note), st.floats(0.01, 20.0), angles, notes
    ),
    st.builds(lambda s, note: Wait(duration_s=s, note=note), st.floats(0.0, 3600.0), notes),
    st.builds(
        lambda h, r, lean, note: Pose(height_m=h, roll_rad=r, lean_m=lean, note=note),
        st.floats(0.01, 2.0),
        st.none() | st.floats(-0.7, 0.7),
        st.none() | st.tuples(st.floats(-0.3, 0.3), st.floats(-0.3, 0.3)),
        notes,
    ),
    st.builds(lambda s, note: Speed(share=s, note=note), st.floats(0.05, 1.0), notes),
    st.builds(lambda n, note: ChangeGait(name=n, note=note), st.sampled_from(["crawl", "on", "x-1"]), notes),
)


def numbers(step: Step) -> list[float]:
    """Every number in a step, for a comparison to rounding."""
    match step:
        case Move():
            return list(step.twist)
        case Wait():
            return [step.duration_s]
        case Pose():
            return [step.height_m or 0.0, step.roll_rad or 0.0, *(step.lean_m or (0.0, 0.0))]
        case Speed():
            return [step.share]
        case ChangeGait():
            return []


@given(st.lists(steps_of_any_kind, min_size=1, max_size=5))
def test_steps_survive_the_socket(steps: list[Step]) -> None:
    back = steps_from_json(json.loads(json.dumps(steps_to_json(steps))))
    assert len(back) == len(steps)
    for one, other in zip(steps, back, strict=True):
        assert type(one) is type(other)
        assert one.note == other.note
        # 1e-6 mm and 1e-6 degrees are kept; an arc's length is a product of both.
        assert numbers(other) == pytest.approx(numbers(one), rel=1e-6, abs=1e-6)


json_values = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=8),
    lambda inner: (
        st.lists(inner, max_size=4)
        | st.dictionaries(
            st.sampled_from(["forward_mm", "arc", "posture", "lean_mm", "gait", "note", "turn_deg", "x"]),
            inner,
            max_size=3,
        )
    ),
    max_leaves=12,
)


@given(json_values)
def test_whatever_comes_over_the_socket_is_a_route_or_refused(value: object) -> None:
    try:
        steps = steps_from_json(value, JUNIPER)
    except CommandError as error:
        assert str(error)  # noqa: PT017  either way is right
    else:
        assert steps
        assert all(math.isfinite(seconds) for seconds in expected_seconds(steps, JUNIPER))


@pytest.mark.parametrize(
    ("value", "words"),
    [
        ({"forward_mm": 1}, "steps is no list"),
        ([{"forward_mm": 10**6000}], "steps[0].forward_mm: found a huge number"),
        ([{"forward_mm": True}], "found True"),
        ([{"forward_mm": "300"}], "Remove the quotes"),
        ([[[[[[[1]]]]]]], "steps[0]: found a list of 1"),
        ([{"x" * 10000: 1}], "unknown key"),
        ([{"gait": "gallop"}], "for juniper"),
    ],
)
def test_the_socket_is_told_what_is_wrong(value: object, words: str) -> None:
    with pytest.raises(CommandError) as caught:
        steps_from_json(value, JUNIPER)
    assert words in str(caught.value)
    assert len(str(caught.value)) < 2000


@pytest.mark.parametrize("path", sorted((CONFIG / "routes").glob("*.yaml")), ids=lambda path: path.stem)
def test_the_demo_routes_fit_juniper_and_end_where_they_began(path: Path) -> None:
    steps = load_route(path, JUNIPER)
    place = (0.0, 0.0, 0.0)
    for step in steps:
        if isinstance(step, Move):
            place = moved(place, step.twist)
    assert place[:2] == pytest.approx((0.0, 0.0), abs=1e-9)
    assert math.remainder(place[2], math.tau) == pytest.approx(0.0, abs=1e-9)


def test_the_bench_round_shows_every_kind_of_step_in_less_than_a_minute() -> None:
    steps = load_route(CONFIG / "routes" / "bench-round.yaml", JUNIPER)
    assert {type(step) for step in steps} == {Move, Wait, Pose, ChangeGait, Speed}
    twists = [step.twist for step in steps if isinstance(step, Move)]
    assert any(x and yaw for x, _, yaw in twists)  # an arc
    assert any(y for _, y, _ in twists)  # sideways
    walked_m = sum(math.hypot(x, y) for x, y, _ in twists)
    assert 2.0 <= walked_m <= 3.0
    assert sum(expected_seconds(steps, JUNIPER)) < 45.0


PUBLISHED = CONFIG / "routes" / "hobnail-route.schema.json"


def test_the_published_schema_is_current() -> None:
    """If not: python -m hobnail.service.route_file > config/routes/hobnail-route.schema.json"""
    assert PUBLISHED.read_text() == schema_text()


@pytest.mark.parametrize(
    ("text", "good"),
    [
        (None, True),
        ("steps: [{forward_mm: 3, note: x}]", True),
        ("steps: []", False),
        ("steps: [{note: x}]", False),
        ("steps: [{forward_mm: 3, wait_s: 1}]", False),
        ("steps: [{forward_mm: 30000}]", False),
        ("steps: [{arc: {radius_mm: 30}}]", False),
        ("steps: [{posture: {}}]", False),
        ("steps: [{fowrard_mm: 3}]", False),
        ("steps: [{wait_s: '1'}]", False),
    ],
)
def test_the_schema_and_the_reader_agree(text: str | None, good: bool, tmp_path: Path) -> None:
    # Judge from outside: the jsonschema library.
    validator = jsonschema.Draft202012Validator(json.loads(PUBLISHED.read_text()))
    for path in sorted((CONFIG / "routes").glob("*.yaml")) if text is None else [written(tmp_path, text)]:
        assert text is not None or path.read_text().startswith(
            f"# yaml-language-server: $schema={PUBLISHED.name}\n"
        )
        assert validator.is_valid(yaml.safe_load(path.read_text())) is good
        if good:
            load_route(path)
        else:
            problems(path)
