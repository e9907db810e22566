"""The JSON Schema of a robot's configuration, for editors: made from the tables that the loader uses.

`python -m hobnail.config.schema > config/hobnail.schema.json` publishes it.  It
knows keys, types and bounds; checks between values are the loader's alone.
"""

from __future__ import annotations

import json
from typing import Any

from hobnail.config.fields import Group
from hobnail.config.tables import ROBOT


def robot_schema() -> dict[str, Any]:
    """JSON Schema, draft 2020-12, of a configuration file."""
    return {
        "$schema": "https://json-schema.org/draft/2020-12/schema",
        "title": "hobnail robot",
        **Group(ROBOT).schema(),
    }


def text() -> str:
    """The schema file as published."""
    return json.dumps(robot_schema(), indent=1) + "\n"


if __name__ == "__main__":
    print(text(), end="")
