"""Judges whether a line is a JSON-RPC 2.0 answer, by section 5 of the specification; for tests only."""

from __future__ import annotations

import json
from typing import NoReturn


def _no_constant(text: str) -> NoReturn:
    raise AssertionError(f"{text} in an answer")


def assert_answer_is_valid(answer: bytes | None) -> None:
    """What section 5 of the specification asks of a response object, or of an array of them."""
    if answer is None:
        return
    assert b"\n" not in answer
    value = json.loads(answer, parse_constant=_no_constant)
    assert value != []
    for one in value if isinstance(value, list) else [value]:
        assert one["jsonrpc"] == "2.0"
        assert one.keys() in ({"jsonrpc", "result", "id"}, {"jsonrpc", "error", "id"})
        assert one["id"] is None or isinstance(one["id"], (str, int, float))
        assert not isinstance(one["id"], bool)
        if "error" in one:
            assert isinstance(one["error"]["code"], int)
            assert isinstance(one["error"]["message"], str)
            assert {"cause", "next"} <= one["error"]["data"].keys()
