"""Damaged configurations: each is refused with its place and what is allowed, or truly valid; no tracebacks.

Judges from outside: PyYAML's composer for places, jsonschema for what was let through.
"""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path

import jsonschema
import pytest
import yaml
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from corpus import damage
from hobnail.config import load_robot
from hobnail.errors import ConfigError, Problem
from hobnail.robot import Robot

CONFIG = Path(__file__).parents[2] / "config"
CORPUS = Path(__file__).parents[1] / "corpus"
SORREL = (CORPUS / "sorrel.yaml").read_text()
BURDOCK = (CORPUS / "burdock.yaml").read_text()
DATA = yaml.safe_load(SORREL)
BLOCK = damage.dumped(DATA)  # the same without comments, every value on a line of its own
SCHEMA = json.loads((CONFIG / "hobnail.schema.json").read_text())

# Keys that sorrel writes but could leave out, listed by hand.
OPTIONAL = {
    "body.com_mm",
    "body.size_mm",
    "supply.low_v",
    "boards[0].oscillator_mhz",
    *(f"servos[0].{key}" for key in ("usable_speed", "stiffness_nm_per_rad", "dead_band_us", "backlash_deg")),
    "servos[0].shortest_frame_ms",
    *(f"leg_defaults.{key}" for key in ("foot_radius_mm", "hip_kg", "upper_kg", "lower_kg")),
    "stance.spread_mm",
    *(f"posture.{key}" for key in ("roll_deg", "pitch_deg", "yaw_deg", "lean_mm", "rate_mm_s", "rate_deg_s")),
    *(f"gaits[{gait}].{key}" for gait in range(4) for key in ("cycle_s", "cycle_range_s", "lift_mm")),
    "gaits[0].duty",
    *(f"envelope.{key}" for key in ("acceleration_m_s2", "turn_acceleration_rad_s2")),
    "safety",
    *(f"safety.{key}" for key in DATA["safety"]),
}

Refused = Callable[[str | bytes], tuple[Problem, ...]]


@pytest.fixture
def load(tmp_path: Path) -> Callable[[str | bytes], Robot]:
    path = tmp_path / "damaged.yaml"

    def load(text: str | bytes) -> Robot:
        path.write_bytes(text if isinstance(text, bytes) else text.encode())
        return load_robot(path)

    return load


@pytest.fixture
def refused(load: Callable[[str | bytes], Robot]) -> Refused:
    """The problems of a file that must be refused."""

    def refused(text: str | bytes) -> tuple[Problem, ...]:
        try:
            robot = load(text)
        except ConfigError as error:
            for problem in error.problems:
                check_form(problem)
            return error.problems
        pytest.fail(f"accepted: {robot}\n{text!r}")

    return refused


def check_form(problem: Problem) -> None:
    """A person can read it, and find the place."""
    assert problem.file.endswith("damaged.yaml")
    assert problem.found
    assert problem.allowed
    assert "\n" not in str(problem)
    assert len(str(problem)) < 1200
    assert (problem.line > 0) == (problem.column > 0)


def check_damage(damaged: damage.Damage, refused: Refused) -> None:
    """A problem is told at the damaged place, or within what stands there."""
    problems = refused(damaged.text)
    here = [problem for problem in problems if problem.key_path == damaged.path]
    within = [
        problem
        for problem in problems
        if problem.key_path.startswith((f"{damaged.path}.", f"{damaged.path}["))
    ]
    told = [str(problem) for problem in problems]
    if damaged.label.endswith((": 1,5", ": ")):
        # In a list, a comma makes two values of one, and nothing makes one less: the list is told.
        holder = damaged.path[: max(damaged.path.rfind("["), damaged.path.rfind("."))]
        within += [problem for problem in problems if problem.key_path.startswith(holder)]
    assert here or within, (damaged.label, told)
    if here and damaged.line:
        places = {(problem.line, problem.column) for problem in here}
        assert (damaged.line, damaged.column) in places, (damaged.label, damaged.line, damaged.column, told)
    assert any(damaged.hint in problem.hint for problem in here + within), (damaged.label, told)


def test_the_corpus_is_large() -> None:
    makers = (damage.removals, damage.misspelt, damage.duplicated, damage.wrong_values)
    assert sum(1 for maker in makers for _ in maker(BLOCK)) > 1000


def test_a_missing_key_is_told_unless_it_has_a_default(
    load: Callable[[str | bytes], Robot], refused: Refused
) -> None:
    for damaged in damage.removals(BLOCK):
        if damaged.path in OPTIONAL:
            load(damaged.text)
        elif damaged.path.startswith("leg_defaults"):
            # Missed at every leg, since each could have it for itself.
            missing = damaged.path.removeprefix("leg_defaults").lstrip(".")
            told = {problem.key_path for problem in refused(damaged.text)}
            for leg in range(4):
                assert any(path.startswith(f"legs[{leg}].{missing}") for path in told), damaged.label
        else:
            check_damage(damaged, refused)


def test_a_misspelt_key_is_told_with_the_nearest_good_one(refused: Refused) -> None:
    for damaged in damage.misspelt(SORREL):
        check_damage(damaged, refused)


def test_a_duplicate_key_is_told(refused: Refused) -> None:
    for damaged in damage.duplicated(BLOCK):
        check_damage(damaged, refused)


def test_a_wrong_value_is_told(refused: Refused) -> None:
    for damaged in damage.wrong_values(SORREL):
        if not damaged.label.endswith("cycle_s: 12"):  # a good cycle time
            check_damage(damaged, refused)


def test_two_robots_and_ends_of_ranges_are_good(load: Callable[[str | bytes], Robot]) -> None:
    """The corpus would prove nothing if everything were refused."""
    for text in (SORREL, BURDOCK, BLOCK):
        load(text)


@pytest.mark.parametrize("whole", [SORREL, BURDOCK], ids=["sorrel", "burdock"])
def test_a_file_cut_short_is_refused_or_truly_good(whole: str, load: Callable[[str | bytes], Robot]) -> None:
    validator = jsonschema.Draft202012Validator(SCHEMA)
    accepted = 0
    for length in range(0, len(whole.encode()), 5):
        cut = whole.encode()[:length]
        try:
            load(cut)
        except ConfigError as error:
            for problem in error.problems:
                check_form(problem)
        else:
            accepted += 1
            validator.validate(yaml.safe_load(cut))
    # Only what follows the last section that is needed can be missing.
    assert accepted * 5 < len(whole) - whole.index("\nenvelope:")


def test_everything_accepted_passes_the_schema(load: Callable[[str | bytes], Robot]) -> None:
    """Values at random places swapped about: what is let through, another judge lets through, too."""
    validator = jsonschema.Draft202012Validator(SCHEMA)
    numbers = ("-1", "0", "0.5", "1", "3", "12", "90", "180", "2500")
    accepted = 0
    for entry in damage.entries(SORREL):
        if not isinstance(entry.value, yaml.ScalarNode):
            continue
        for number in numbers:
            start, end = entry.value.start_mark.index, entry.value.end_mark.index
            text = SORREL[:start] + number + SORREL[end:]
            try:
                load(text)
            except ConfigError as error:
                for problem in error.problems:
                    check_form(problem)
            else:
                accepted += 1
                validator.validate(yaml.safe_load(text))
    assert accepted > 100


FRAGMENTS = (
    "",
    "\n",
    "  ",
    "- ",
    ": ",
    "[",
    "]",
    "{",
    "}",
    "&a ",
    "*a",
    "!!python/object:os.system x",
    "<<: ",
    "'",
    '"',
    "|",
    "> ",
    "\t",
    "# ",
    "---\n",
    "...\n",
    "%YAML 1.2\n",
    "? ",
    "\x00",
    "\ufeff",
    "\u2028",
    "\ud800",
    "1e309",
    "-0",
    "legs: []\n",
)


@settings(max_examples=200, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(data=st.data())
def test_any_damage_ends_in_a_robot_or_in_problems(
    data: st.DataObject, load: Callable[[str | bytes], Robot]
) -> None:
    text = bytearray(SORREL.encode())
    for _ in range(data.draw(st.integers(1, 4))):
        start = data.draw(st.integers(0, len(text)))
        end = start + data.draw(st.integers(0, 40))
        piece = data.draw(
            st.one_of(
                st.sampled_from(FRAGMENTS).map(lambda each: each.encode("utf-8", "surrogatepass")),
                st.binary(max_size=8),
            )
        )
        text[start:end] = piece
    try:
        load(bytes(text))
    except ConfigError as error:
        for problem in error.problems:
            check_form(problem)
