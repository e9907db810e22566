"""A short run of the fuzzer of protocol and line splitter, and what longer runs have found."""

from __future__ import annotations

from fuzz.fuzz_protocol import run


def test_a_few_hundred_mutated_streams() -> None:
    told = run(600, seed=1)
    # The mutations reach every kind of answer, or they would test little.
    assert {"calls", "result", "batch", "no answer", "line too long"} <= told.keys()
    assert {"error -32700", "error -32600", "error -32601", "error -32602"} <= told.keys()
    assert {"error -32603", "error -32000", "error -32002", "bug KeyError", "bug ValueError"} <= told.keys()
