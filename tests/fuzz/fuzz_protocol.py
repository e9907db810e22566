"""Fuzz of protocol and line splitter: good requests, damaged at random, until something breaks.

    PYTHONPATH=runtime:drivers:tests python tests/fuzz/fuzz_protocol.py 1000000 --seed 1

Input number k depends on seed and k alone: `--first k` with a count of 1 runs it again.

Every input is one stream of bytes, made from good requests by random changes.
It is cut into lines by the server's `Connection` in random pieces and answered
by the `Protocol`.  Judges: `bytes.split` for the lines, the standard library's
`json` for the values, section 5 of the JSON-RPC 2.0 specification for the
answers, and the table of methods for what reaches the handler.
Ends with code 1 and the input as Python text at the first that fails.
"""

from __future__ import annotations

import argparse
import json
import math
import random
import re
import sys
from collections import Counter
from pathlib import Path

if __name__ == "__main__":
    sys.path[:0] = [str(Path(__file__).parents[1])]

from hobnail.errors import CommanderError, StateError
from hobnail.service.connection import Connection, Limits
from hobnail.service.methods import METHODS, Kind
from hobnail.service.protocol import (
    MAX_DEPTH,
    MAX_INTEGER_CHARS,
    MAX_NUMBER_CHARS,
    MAX_VALUES,
    BadLineError,
    Params,
    Protocol,
    parse,
)
from jsonrpc_judge import assert_answer_is_valid

LIMITS = Limits(max_line=600, max_discard=10**9, rate_hz=1e9, burst=1e9)

_SEEDS = [
    b'{"jsonrpc": "2.0", "method": "walk", "params": {"vx": 0.1, "vy": 0, "yaw_rate": -1e-1}, "id": 1}',
    b'{"jsonrpc": "2.0", "method": "walk", "params": [0.1, 0, 0, [1, -2.5], 0.5], "id": "a"}',
    b'{"jsonrpc": "2.0", "method": "stop", "params": {"category": 0, "reason": "smoke"}}',
    b'{"jsonrpc": "2.0", "method": "posture", "params": {"height_m": 0.15, "lean_m": [0, 0.01]}, "id": null}',
    b'{"jsonrpc": "2.0", "method": "gait", "params": {"name": "trot"}, "id": 2}',
    b'{"jsonrpc": "2.0", "method": "route", "params": {"steps": [{"forward_m": 1}, {"wait_s": 2}]}, "id": 3}',
    b'{"jsonrpc": "2.0", "method": "route", "params": {"cancel": true}, "id": 3.5}',
    b'{"jsonrpc": "2.0", "method": "state", "id": 4}',
    b'{"jsonrpc": "2.0", "method": "watch", "params": {"rate_hz": 10}, "id": 5}',
    b'[{"jsonrpc": "2.0", "method": "stand", "id": 6}, {"jsonrpc": "2.0", "method": "rest"}, 1]',
    '{"jsonrpc": "2.0", "method": "stop", "params": {"reason": "\\u00fc \U0001f600"}, "id": 7}'.encode(),
]
_NAMES = [
    *(b'"%s"' % name.encode() for name in METHODS),
    *(b'"%s"' % param.name.encode() for method in METHODS.values() for param in method.params),
]
_TOKEN = re.compile(rb'"[^"\\]*"|-?[0-9][0-9.eE+-]*|true|false|null')
_VALUES = [
    *(b"{}", b"[]", b"null", b"true", b"false", b'""', b'"\\u0000"', b'"\xc3\xa9"', b'"%s"' % (b"x" * 300)),
    *(b"0", b"-0", b"1", b"2", b"-1", b"0.5", b"1e2", b"1e308", b"5e-324", b"9223372036854775807"),
    *(b"[0, 0]", b"[1]", b"[[]]", b"[{}]", b'{"a": {"b": [1]}}', b'"2.0"'),
]
_PIECES = [
    *(b'{}[],:"\\\n\r\t -+.eE0123456789'[i : i + 1] for i in range(31)),
    b"NaN",
    b"Infinity",
    b"-Infinity",
    b"1e999",
    b"-0.0",
    b"1e-999",
    b"9" * 25,
    b"0." + b"1" * 50,
    b"18446744073709551616",
    b"null",
    b"true",
    b"false",
    b"\\u0000",
    b"\\ud800",
    b"\\udfff\\ud800",
    b"\\ud83d\\ude00",
    b"\xff",
    b"\xc0\x80",
    b"\xed\xa0\x80",
    b"\xf4\x90\x80\x80",
    b"\xe2\x80\xa8",
    b"\xef\xbb\xbf",
    b"\x00",
    b"[" * (MAX_DEPTH + 1),
    b'{"a":' * 40,
    b"]" * 20,
    b'"id": 1, "id": 2',
    b'"jsonrpc": "1.0"',
    b'"method": "rpc.x"',
    b"x" * 700,
    *_NAMES,
]


def make(rng: random.Random) -> bytes:
    """One stream of one to four lines, changed in none to eight places."""
    text = bytearray(b"\n".join(rng.choices(_SEEDS, k=rng.choice((1, 1, 1, 2, 4)))) + b"\n")
    for _ in range(rng.choice((0, 1, 1, 2, 2, 3, 5, 8))):
        at = rng.randrange(len(text) + 1)
        to = min(len(text), at + rng.choice((1, 1, 2, 5, 20, 80)))
        match rng.randrange(10):
            case 0:
                del text[at:to]
            case 1:
                text[at:at] = rng.choice(_PIECES)
            case 2:
                text[at:to] = rng.choice(_PIECES)
            case 3:
                text[at:at] = text[at:to] * rng.choice((1, 2, 30))
            case 4:
                text[at:at] = rng.randbytes(rng.choice((1, 2, 4)))
            case 5 if at < len(text):
                text[at] ^= 1 << rng.randrange(8)
            case 6 | 7 | 8:  # good JSON in the place of a value or a name
                token = rng.choice(list(_TOKEN.finditer(text)) or [None])
                if token is not None:
                    text[token.start() : token.end()] = rng.choice(_VALUES + _NAMES)
            case _:  # one part in the place of another
                other = rng.randrange(len(text) + 1)
                text[at:to] = text[other : other + rng.choice((3, 10, 40))]
    return bytes(text)


class Handler:
    """Answers in every way that a handler may, and judges what it is given."""

    def __init__(self, rng: random.Random) -> None:
        self.rng = rng
        self.calls = 0

    def __call__(self, method: str, params: Params, _client_id: int) -> object:
        self.calls += 1
        assert isinstance(params, dict)
        table = {param.name: param for param in METHODS[method].params}
        assert params.keys() <= table.keys()
        for name, value in params.items():
            if table[name].kind is Kind.NUMBER:
                assert type(value) is float
                assert math.isfinite(value)
            elif table[name].kind is Kind.PAIR:
                assert isinstance(value, tuple)
                assert [type(part) for part in value] == [float, float]
            json.dumps(value, allow_nan=False, ensure_ascii=False).encode("utf-8")
        match self.rng.randrange(8):
            case 0:
                raise StateError("stand first")
            case 1:
                raise CommanderError('"client" 3 \ud800')
            case 2:
                raise KeyError("a bug")
            case 3:
                return {"speed": math.nan}
            case _:
                return {"params": params}


def _is_within_limits(line: bytes) -> bool:
    """True when the standard library reads the line and none of our limits is near."""
    numbers: list[str] = []

    def note(text: str) -> int:
        numbers.append(text)
        return 0

    def once(pairs: list[tuple[str, object]]) -> dict[str, object]:
        if len(dict(pairs)) < len(pairs):
            raise ValueError
        return dict(pairs)

    def refuse(_text: str) -> int:
        raise ValueError

    try:
        value = json.loads(
            line.decode("utf-8"),
            parse_int=note,
            parse_float=note,
            parse_constant=refuse,
            object_pairs_hook=once,
        )
        json.dumps(value, ensure_ascii=False).encode("utf-8")
    except (ValueError, RecursionError):
        return False
    return (
        _depth(value) <= MAX_DEPTH
        and all(len(text) <= min(MAX_NUMBER_CHARS, MAX_INTEGER_CHARS) for text in numbers)
        and all(math.isfinite(float(text)) for text in numbers)
        and sum(line.count(mark) for mark in (b"[", b"{", b",")) <= MAX_VALUES
    )


def _depth(value: object) -> int:
    if isinstance(value, dict):
        return 1 + max(map(_depth, value.values()), default=0)
    if isinstance(value, list):
        return 1 + max(map(_depth, value), default=0)
    return 0


def _cut(stream: bytes, rng: random.Random) -> list[bytes | None]:
    connection = Connection(LIMITS, 0.0)
    lines: list[bytes | None] = []
    at = 0
    while at < len(stream):
        size = rng.choice((1, 7, 50, 300, 1000))
        connection.feed(stream[at : at + size])
        at += size
        while (rng.random() < 0.5 or not connection.has_room()) and connection.is_ready(0.0):
            lines.append(connection.take_line())
        assert len(connection.inbox) <= LIMITS.max_line + 1000
    connection.feed(b"")
    while connection.is_ready(0.0):
        lines.append(connection.take_line())
    return lines


def check(stream: bytes, rng: random.Random, told: Counter[str]) -> None:
    """One input through everything; AssertionError, or whatever escapes, when it fails."""
    lines = _cut(stream, rng)
    expected = stream.split(b"\n")
    if not expected[-1]:
        expected.pop()
    assert lines == [line if len(line) <= LIMITS.max_line else None for line in expected], "lines"
    handler = Handler(rng)
    protocol = Protocol(handler, on_error=lambda _where, error: told.update([f"bug {type(error).__name__}"]))
    for line in lines:
        if line is None:
            told["line too long"] += 1
            continue
        try:
            value = parse(line)
        except BadLineError:
            assert not _is_within_limits(line), "refused, but good JSON within the limits"
        else:
            assert json.dumps(value) == json.dumps(json.loads(line.decode("utf-8"))), "read otherwise"
        before = handler.calls
        answer = protocol.answer(line)
        assert_answer_is_valid(answer)
        told["calls"] += handler.calls - before
        told[_kind(answer)] += 1


def _kind(answer: bytes | None) -> str:
    if answer is None:
        return "no answer"
    value = json.loads(answer)
    if isinstance(value, list):
        return "batch"
    return f"error {value['error']['code']}" if "error" in value else "result"


def run(count: int, seed: int, first: int = 0) -> Counter[str]:
    """`count` inputs; how many lines were answered in which way.  Raises at the first failure."""
    told: Counter[str] = Counter()
    for i in range(first, first + count):
        rng = random.Random(f"{seed}/{i}")
        stream = make(rng)
        try:
            check(stream, rng, told)
        except BaseException as error:
            error.add_note(f"input {i} of seed {seed}: {stream!r}")
            raise
        if (i + 1) % 100_000 == 0:
            print(f"{i + 1} inputs: {dict(told)}", flush=True)
    return told


def main() -> int:
    """Run from the command line."""
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("count", nargs="?", type=int, default=10_000)
    parser.add_argument("--seed", type=int, default=0)
    parser.add_argument("--first", type=int, default=0)
    options = parser.parse_args()
    told = run(options.count, options.seed, options.first)
    for name, number in sorted(told.items()):
        print(f"{number:10} {name}")
    return 0


if __name__ == "__main__":
    sys.exit(main())
