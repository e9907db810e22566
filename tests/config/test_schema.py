"""The published JSON Schema: current, accepts the demo robots, refuses what the loader refuses.

Judge from outside: the jsonschema library.
"""

from __future__ import annotations

import copy
import json
from pathlib import Path
from typing import Any

import jsonschema
import pytest
import yaml

from hobnail.config.schema import text

CONFIG = Path(__file__).parents[2] / "config"
PUBLISHED = CONFIG / "hobnail.schema.json"
ROBOTS = sorted(CONFIG.glob("*.yaml"))
VALIDATOR = jsonschema.Draft202012Validator(json.loads(PUBLISHED.read_text()))


def test_the_published_schema_is_current() -> None:
    """If not: python -m hobnail.config.schema > config/hobnail.schema.json"""
    assert PUBLISHED.read_text() == text()


def test_it_is_a_schema() -> None:
    jsonschema.Draft202012Validator.check_schema(json.loads(PUBLISHED.read_text()))


@pytest.mark.parametrize("path", ROBOTS, ids=lambda path: path.name)
def test_demo_robots_name_and_pass_it(path: Path) -> None:
    assert path.read_text().startswith(f"# yaml-language-server: $schema={PUBLISHED.name}\n")
    VALIDATOR.validate(yaml.safe_load(path.read_text()))


@pytest.mark.parametrize(
    ("path", "value"),
    [
        (("periodms",), 10),
        (("period_ms",), "10"),
        (("period_ms",), 1),
        (("period_ms",), None),
        (("name",), "two words"),
        (("boards", 0, "address"), 0x80),
        (("boards", 0, "address"), 64.5),
        (("servos", 0, "torque_kgfcm"), 20),
        (("servos", 0, "pulse_map_deg_us"), [[0, 1500]]),
        (("servos", 0, "pulse_map_deg_us", 0), [0, 1500, 1]),
        (("legs",), []),
        (("legs", 0, "hip_mm"), [1, 2]),
        (("legs", 0, "joints", "roll", "channel"), 16),
        (("legs", 0, "joints", "roll", "direction"), 0),
        (("leg_defaults", "knee_bends"), "sideways"),
        (("leg_defaults", "joints", "ankle"), {}),
        (("gaits", 0, "cycle_s"), "automatic"),
        (("gaits", 0, "cycle_s"), 0),
        (("gaits", 0), 5),
        (("safety",), []),
    ],
)
def test_it_refuses(path: tuple[str | int, ...], value: object) -> None:
    robot: Any = copy.deepcopy(yaml.safe_load((CONFIG / "juniper.yaml").read_text()))
    holder = robot
    for part in path[:-1]:
        holder = holder[part]
    holder[path[-1]] = value
    assert not VALIDATOR.is_valid(robot)


def test_a_gait_by_name_alone_passes() -> None:
    robot = yaml.safe_load((CONFIG / "juniper.yaml").read_text())
    robot["gaits"] = ["trot", {"name": "crawl"}]
    VALIDATOR.validate(robot)
