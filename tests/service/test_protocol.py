"""JSON-RPC 2.0 against its specification, section by section, and against hostile lines."""

from __future__ import annotations

import json
import math
from collections.abc import Callable

import pytest
from hypothesis import example, given
from hypothesis import strategies as st

from hobnail import errors
from hobnail.service.methods import METHODS, Kind, Method, Param, describe, markdown
from hobnail.service.protocol import (
    MAX_BATCH,
    MAX_DEPTH,
    MAX_VALUES,
    BadLineError,
    Exchange,
    Params,
    Protocol,
    notification,
    parse,
)
from jsonrpc_judge import assert_answer_is_valid

# --- the examples of section 7 -----------------------------------------------------------------
# https://www.jsonrpc.org/specification, section 7. What is asked and what kind of answer comes
# back is listed there; the exact texts are from memory.


def _whole(name: str) -> Param:
    return Param(name, Kind.INTEGER, "", -1000, 1000)


_EXAMPLE_METHODS = {
    method.name: method
    for method in (
        Method("subtract", "", (_whole("minuend"), _whole("subtrahend"))),
        Method("update", "", tuple(_whole(name) for name in "abcde")),
        Method("sum", "", tuple(_whole(name) for name in "abc")),
        Method("notify_sum", "", tuple(_whole(name) for name in "abc")),
        Method("notify_hello", "", (_whole("a"),)),
        Method("get_data", ""),
    )
}


def _example_handler(method: str, params: Params, client_id: int) -> object:
    assert isinstance(params, dict)
    assert client_id == 0
    match method:
        case "subtract":
            return params["minuend"] - params["subtrahend"]  # type: ignore[operator]
        case "sum":
            return sum(params.values())  # type: ignore[arg-type]
        case "get_data":
            return ["hello", 5]
        case _:
            return None


_NOT_FOUND = '"error": {"code": -32601, "message": "Method not found"}'
_PARSE_ERROR = '{"jsonrpc": "2.0", "error": {"code": -32700, "message": "Parse error"}, "id": null}'
_INVALID = '{"jsonrpc": "2.0", "error": {"code": -32600, "message": "Invalid Request"}, "id": null}'

_EXAMPLES = [
    (
        '{"jsonrpc": "2.0", "method": "subtract", "params": [42, 23], "id": 1}',
        '{"jsonrpc": "2.0", "result": 19, "id": 1}',
    ),
    (
        '{"jsonrpc": "2.0", "method": "subtract", "params": [23, 42], "id": 2}',
        '{"jsonrpc": "2.0", "result": -19, "id": 2}',
    ),
    (
        '{"jsonrpc": "2.0", "method": "subtract", "params": {"subtrahend": 23, "minuend": 42}, "id": 3}',
        '{"jsonrpc": "2.0", "result": 19, "id": 3}',
    ),
    (
        '{"jsonrpc": "2.0", "method": "subtract", "params": {"minuend": 42, "subtrahend": 23}, "id": 4}',
        '{"jsonrpc": "2.0", "result": 19, "id": 4}',
    ),
    ('{"jsonrpc": "2.0", "method": "update", "params": [1,2,3,4,5]}', None),
    ('{"jsonrpc": "2.0", "method": "foobar"}', None),
    ('{"jsonrpc": "2.0", "method": "foobar", "id": "1"}', f'{{"jsonrpc": "2.0", {_NOT_FOUND}, "id": "1"}}'),
    ('{"jsonrpc": "2.0", "method": "foobar, "params": "bar", "baz]', _PARSE_ERROR),
    ('{"jsonrpc": "2.0", "method": 1, "params": "bar"}', _INVALID),
    (
        '[ {"jsonrpc": "2.0", "method": "sum", "params": [1,2,4], "id": "1"}, {"jsonrpc": "2.0", "method" ]',
        _PARSE_ERROR,
    ),
    ("[]", _INVALID),
    ("[1]", f"[{_INVALID}]"),
    ("[1,2,3]", f"[{_INVALID}, {_INVALID}, {_INVALID}]"),
    (
        '[ {"jsonrpc": "2.0", "method": "sum", "params": [1,2,4], "id": "1"},'
        ' {"jsonrpc": "2.0", "method": "notify_hello", "params": [7]},'
        ' {"jsonrpc": "2.0", "method": "subtract", "params": [42,23], "id": "2"},'
        ' {"foo": "boo"},'
        ' {"jsonrpc": "2.0", "method": "foo.get", "params": {"name": "myself"}, "id": "5"},'
        ' {"jsonrpc": "2.0", "method": "get_data", "id": "9"} ]',
        '[{"jsonrpc": "2.0", "result": 7, "id": "1"}, {"jsonrpc": "2.0", "result": 19, "id": "2"}, '
        f'{_INVALID}, {{"jsonrpc": "2.0", {_NOT_FOUND}, "id": "5"}}, '
        '{"jsonrpc": "2.0", "result": ["hello", 5], "id": "9"}]',
    ),
    (
        '[ {"jsonrpc": "2.0", "method": "notify_sum", "params": [1,2,4]},'
        ' {"jsonrpc": "2.0", "method": "notify_hello", "params": [7]} ]',
        None,
    ),
]


def _without_data(answer: bytes) -> str:
    """The answer as the specification prints it: `data` is ours to add (section 5.1)."""
    value = json.loads(answer)
    for one in value if isinstance(value, list) else [value]:
        if "error" in one:
            assert set(one["error"].pop("data")) == {"cause", "detail", "next"}
    return json.dumps(value)


@pytest.mark.parametrize(("asked", "answered"), _EXAMPLES)
def test_every_example_of_the_specification(asked: str, answered: str | None) -> None:
    answer = Protocol(_example_handler, methods=_EXAMPLE_METHODS).answer(asked.encode())
    if answered is None:
        assert answer is None
        return
    assert answer is not None
    if "error" in answered:
        assert _without_data(answer) == answered
    else:
        assert answer == answered.encode()


# --- the rules of sections 4 to 6 ----------------------------------------------------------------


class Recorder:
    """A handler that keeps what it was asked, and answers with a given value or error."""

    def __init__(self, result: object = None) -> None:
        self.calls: list[tuple[str, Params]] = []
        self.result = result

    def __call__(self, method: str, params: Params, _client_id: int) -> object:
        self.calls.append((method, params))
        if isinstance(self.result, BaseException):
            raise self.result
        return self.result


def _ask(line: str | bytes, handler: Callable[[str, Params, int], object] | None = None) -> object:
    answer = Protocol(handler or Recorder()).answer(line if isinstance(line, bytes) else line.encode())
    return None if answer is None else json.loads(answer)


def _code(line: str | bytes) -> tuple[int, object]:
    answer = _ask(line)
    assert isinstance(answer, dict)
    return answer["error"]["code"], answer["id"]


@pytest.mark.parametrize(
    "given_id", ['"a"', '""', "0", "-7", "1.5", "null", "18446744073709551615", '"\\u00e9"']
)
def test_an_id_comes_back_as_it_was(given_id: str) -> None:
    answer = _ask(f'{{"jsonrpc": "2.0", "method": "stand", "id": {given_id}}}')
    assert answer == {"jsonrpc": "2.0", "result": None, "id": json.loads(given_id)}


def test_an_id_of_null_is_a_request_and_no_notification() -> None:
    assert _ask('{"jsonrpc": "2.0", "method": "stand", "id": null}') is not None
    assert _ask('{"jsonrpc": "2.0", "method": "stand"}') is None


@pytest.mark.parametrize("wrong_id", ["true", "false", "{}", "[]", "[1]"])
def test_an_id_of_another_type_is_refused_with_null(wrong_id: str) -> None:
    assert _code(f'{{"jsonrpc": "2.0", "method": "stand", "id": {wrong_id}}}') == (-32600, None)


@pytest.mark.parametrize(
    "line",
    [
        '{"method": "stand", "id": 5}',
        '{"jsonrpc": "1.0", "method": "stand", "id": 5}',
        '{"jsonrpc": 2.0, "method": "stand", "id": 5}',
        '{"jsonrpc": "2.0", "id": 5}',
        '{"jsonrpc": "2.0", "method": null, "id": 5}',
        '{"jsonrpc": "2.0", "method": ["stand"], "id": 5}',
        '{"jsonrpc": "2.0", "method": "stand", "params": null, "id": 5}',
        '{"jsonrpc": "2.0", "method": "stand", "params": 1, "id": 5}',
        '{"jsonrpc": "2.0", "method": "walk", "parms": {"vx": 0.1}, "id": 5}',
    ],
)
def test_an_invalid_request_is_refused_under_its_id(line: str) -> None:
    handler = Recorder()
    answer = _ask(line, handler)
    assert isinstance(answer, dict)
    assert (answer["error"]["code"], answer["id"], handler.calls) == (-32600, 5, [])


@pytest.mark.parametrize("line", ["1", "null", "true", '"stand"', "-0.5"])
def test_a_bare_value_is_an_invalid_request(line: str) -> None:
    assert _code(line) == (-32600, None)


@pytest.mark.parametrize(
    "line",
    ['{"jsonrpc": "2.0", "method": "rpc.discover", "id": 1}', '{"jsonrpc": "2.0", "method": "", "id": 1}'],
)
def test_unknown_and_reserved_methods_are_not_found(line: str) -> None:
    assert _code(line) == (-32601, 1)


def test_notifications_are_never_answered_whatever_goes_wrong() -> None:
    line = '{"jsonrpc": "2.0", "method": "walk", "params": {"vx": 0.1}}'
    for result in (errors.StateError("stand first"), ValueError("a bug"), math.nan, object()):
        handler = Recorder(result)
        assert Protocol(handler, on_error=lambda _where, _error: None).answer(line.encode()) is None
        assert len(handler.calls) == 1
    assert _ask('{"jsonrpc": "2.0", "method": "walk", "params": {"vx": "fast"}}') is None


# --- texts that are no JSON, or beyond the limits (RFC 8259) -------------------------------------


@pytest.mark.parametrize(
    ("line", "told"),
    [
        (b"", "character 1"),
        (b"{", "character 2"),
        (b"\xff", "byte 1 is not UTF-8"),
        (b'{"a": "\xc3"}', "byte 8 is not UTF-8"),
        (b'"\xed\xa0\x80"', "byte 2 is not UTF-8"),  # a surrogate spelled in UTF-8
        (b'"\xc0\x80"', "byte 2 is not UTF-8"),  # an overlong NUL
        (b"\xef\xbb\xbf{}", "character 1"),
        ('{"a": 1}'.encode("utf-16"), "byte 1 is not UTF-8"),
        (b'{\x00"a": 1}', "character 2"),
        (b'"a\tb"', "Invalid control character"),
        (b'"\\ud800"', "half of a surrogate pair"),
        (b'"\\uDFFF"', "half of a surrogate pair"),
        (b'{"\\udc00": 1}', "half of a surrogate pair"),
        (b"NaN", "NaN is not JSON"),
        (b"[Infinity]", "Infinity is not JSON"),
        (b'{"a": -Infinity}', "-Infinity is not JSON"),
        (b"1e999", "out of the range of a double"),
        (b"-1e309", "out of the range of a double"),
        (b"0." + b"1" * 60_000, "too long"),
        (b"9" * 21, "more than 20 digits"),
        (b"9" * 60_000, "more than 20 digits"),
        (b'{"id": 1, "id": 2}', 'member "id" occurs twice'),
        (b'{"a": {"b": 1, "\\u0062": 2}}', 'member "b" occurs twice'),
        (b"[" * 60_000, "more than 4096 values"),
        (b"[" * (MAX_DEPTH + 1) + b"]" * (MAX_DEPTH + 1), "nested more than 16 deep"),
        (b'{"a":' * (MAX_DEPTH + 1) + b"1" + b"}" * (MAX_DEPTH + 1), "nested more than 16 deep"),
        (b"[" * (MAX_VALUES - 1), "nested too deep"),
        (b"]" * 20 + b"[" * 20, "Expecting value"),
        (b"[" + b"0," * MAX_VALUES + b"0]", "more than 4096 values"),
        (b"01", "Extra data"),
        (b"{'a': 1}", "character 2"),
        (b"{} {}", "Extra data"),
    ],
)
def test_a_bad_text_is_a_parse_error_that_says_why(line: bytes, told: str) -> None:
    answer = _ask(line)
    assert isinstance(answer, dict)
    assert answer["id"] is None
    assert (answer["error"]["code"], answer["error"]["message"]) == (-32700, "Parse error")
    assert told in answer["error"]["data"]["detail"]


@pytest.mark.parametrize(
    ("line", "value"),
    [
        (b'"\\ud83d\\ude00"', "\U0001f600"),
        (b'"[[[[[[[[[[[[[[[[[[[[[[[[["', "[" * 25),
        (b'["\\"[[[[[[[[[[", "[[[[[[[[[[\\\\"]', ['"[[[[[[[[[[', "[[[[[[[[[[\\"]),
        (b"[" * MAX_DEPTH + b"]" * MAX_DEPTH, None),
        (b"[" + b"[]," * 40 + b"[]]", [[]] * 41),
        (b"\t {} \r", {}),
        (b"-9223372036854775808", -(2**63)),
        (b"1e308", 1e308),
        (b"1e-400", 0.0),
    ],
)
def test_a_text_within_the_limits_is_read(line: bytes, value: object) -> None:
    read = parse(line)
    if value is not None:
        assert read == value


def test_an_unfinished_string_of_quotes_is_measured_in_linear_time() -> None:
    """Steps, not seconds: every match of the scan ends where the next one starts, so that
    their number is that of the strings there are, here one."""
    from hobnail.service import protocol

    line = b"[" * (MAX_DEPTH + 1) + b'"' + b'\\"' * 30_000
    matches = list(protocol._STRING.finditer(line))
    assert [match.span() for match in matches] == [(MAX_DEPTH + 1, len(line))]


def test_a_batch_beyond_the_limit_is_refused_as_a_whole() -> None:
    one = '{"jsonrpc": "2.0", "method": "stand"}'
    handler = Recorder()
    answer = _ask(f"[{', '.join([one] * (MAX_BATCH + 1))}]", handler)
    assert isinstance(answer, dict)
    assert answer["error"]["code"] == -32600
    assert handler.calls == []
    assert _ask(f"[{', '.join([one] * MAX_BATCH)}]", handler) is None
    assert len(handler.calls) == MAX_BATCH


def test_a_batch_is_carried_out_a_call_at_a_step() -> None:
    handler = Recorder()
    line = b"[%b]" % b", ".join(b'{"jsonrpc": "2.0", "method": "stand", "id": %d}' % i for i in range(3))
    exchange = Exchange(Protocol(handler), line, 0)
    assert (exchange.calls, exchange.garbage, len(handler.calls)) == (3, False, 0)
    assert [exchange.step() for _ in range(3)] == [False, False, True]
    assert exchange.answer is not None
    assert [one["id"] for one in json.loads(exchange.answer)] == [0, 1, 2]


# --- errors ---------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("error", "code", "cause"),
    [
        (errors.StateError("walk: the robot lies down; send `stand` first"), -32000, "state"),
        (errors.StoppedError("a stop is latched"), -32001, "stopped"),
        (errors.CommanderError("client 3 commands"), -32002, "commander"),
        (errors.FaultError("bus-error is latched"), -32003, "fault"),
        (errors.CommandError("vx: 9 m/s"), -32004, "value"),
        (errors.RouteError([errors.Problem("r.yaml", 1, 1, "steps", "none", "some")]), -32004, "route"),
        (errors.DriverUnavailableError("no such driver"), -32005, "driver"),
        (errors.ServiceUnavailableError("nothing answers"), -32005, "service"),
        (errors.HobnailError("what"), -32005, "internal"),
        (errors.StateError(), -32000, "state"),
    ],
)
def test_own_errors_keep_code_cause_and_next_step(error: errors.HobnailError, code: int, cause: str) -> None:
    answer = _ask('{"jsonrpc": "2.0", "method": "stand", "id": 1}', Recorder(error))
    assert isinstance(answer, dict)
    told = answer["error"]
    assert (told["code"], told["data"]["cause"]) == (code, cause)
    assert told["message"] == (str(error) or cause)
    assert told["data"]["next"]


def test_a_message_that_says_what_to_do_is_the_next_step() -> None:
    error = errors.FaultError("bus-error: no answer; check the plug of the bus")
    answer = _ask('{"jsonrpc": "2.0", "method": "stand", "id": 1}', Recorder(error))
    assert isinstance(answer, dict)
    assert answer["error"]["data"]["next"] == "check the plug of the bus"


@pytest.mark.parametrize(
    "result", [KeyError("secret"), RecursionError(), MemoryError(), math.nan, {1j}, {(1,): 2}]
)
def test_a_bug_in_a_handler_is_an_internal_error_that_tells_nothing_but_is_reported(result: object) -> None:
    told: list[tuple[str, BaseException]] = []
    protocol = Protocol(Recorder(result), on_error=lambda where, error: told.append((where, error)))
    answer = protocol.answer(b'{"jsonrpc": "2.0", "method": "state", "id": 1}')
    assert answer is not None
    error = json.loads(answer)["error"]
    assert (error["code"], error["message"]) == (-32603, "Internal error")
    assert b"secret" not in answer
    assert len(told) == 1
    assert "state" in told[0][0]


def test_an_interrupt_is_not_swallowed() -> None:
    with pytest.raises(KeyboardInterrupt):
        _ask('{"jsonrpc": "2.0", "method": "state", "id": 1}', Recorder(KeyboardInterrupt()))


def test_without_a_sink_a_bug_is_logged(caplog: pytest.LogCaptureFixture) -> None:
    _ask('{"jsonrpc": "2.0", "method": "state", "id": 1}', Recorder(KeyError("x")))
    assert [record.name for record in caplog.records] == ["hobnail.service"]


def test_a_notification_that_is_no_json_is_refused_to_its_sender() -> None:
    assert json.loads(notification("state", {"a": 1})) == {
        "jsonrpc": "2.0",
        "method": "state",
        "params": {"a": 1},
    }
    with pytest.raises(ValueError, match="JSON"):
        notification("state", {"a": math.inf})


# --- the table of methods ---------------------------------------------------------------------------


def _params(method: str, params: str) -> tuple[dict[str, object] | None, str]:
    """What the handler was given, or the message of the refusal."""
    handler = Recorder()
    answer = _ask(f'{{"jsonrpc": "2.0", "method": "{method}", "params": {params}, "id": 1}}', handler)
    assert isinstance(answer, dict)
    if "error" in answer:
        assert answer["error"]["code"] == -32602
        return None, answer["error"]["message"]
    (_, given_on), *_ = handler.calls
    assert isinstance(given_on, dict)
    return given_on, ""


_STILL = {"vx": 0.0, "vy": 0.0, "yaw_rate": 0.0, "pivot": (0.0, 0.0)}


@pytest.mark.parametrize(
    ("method", "params", "given_on"),
    [
        ("walk", "{}", _STILL),
        ("walk", "[]", _STILL),
        ("walk", '{"vx": 1}', {**_STILL, "vx": 1.0}),
        ("walk", '{"vx": 0.1, "ttl_s": null}', {**_STILL, "vx": 0.1}),
        ("walk", "[0.1, 0, -1, null, 1]", {**_STILL, "vx": 0.1, "yaw_rate": -1.0, "ttl_s": 1.0}),
        ("walk", '{"pivot": [1, -2]}', {**_STILL, "pivot": (1.0, -2.0)}),
        ("stop", "{}", {"category": 1, "reason": ""}),
        ("stop", '[0, "smoke"]', {"category": 0, "reason": "smoke"}),
        ("gait", '["trot"]', {"name": "trot"}),
        ("posture", '{"roll_rad": 0.1, "lean_m": [0, 0.01]}', {"roll_rad": 0.1, "lean_m": (0.0, 0.01)}),
        ("route", '{"steps": [{"wait_s": 1}]}', {"steps": [{"wait_s": 1}]}),
        ("route", '{"cancel": true}', {"cancel": True}),
        ("watch", "{}", {"rate_hz": 10.0}),
        ("watch", "[0]", {"rate_hz": 0.0}),
    ],
)
def test_parameters_reach_the_handler_by_name_and_converted(
    method: str, params: str, given_on: dict[str, object]
) -> None:
    found, message = _params(method, params)
    assert message == ""
    assert found == given_on
    assert [type(value) for value in found.values()] == [type(value) for value in given_on.values()]


@pytest.mark.parametrize(
    ("method", "params", "words"),
    [
        ("walk", '{"vx": "fast"}', ["vx", '"fast"', "a number", "-100 to 100 m/s"]),
        ("walk", '{"vx": true}', ["vx", "true", "a number"]),
        ("walk", '{"vx": 1e300}', ["vx", "1e+300", "-100 to 100 m/s"]),
        ("walk", '{"vx": 9223372036854775807}', ["vx", "9223372036854775807"]),
        ("walk", '{"vx": [0.1]}', ["vx", "[0.1]", "a number"]),
        (
            "walk",
            '{"yaw_rte": 0.1}',
            ['"yaw_rte"', "no such parameter", "did you mean yaw_rate", "vx, vy, yaw_rate, pivot, ttl_s"],
        ),
        ("walk", "[0.1, 0, 0, [0, 0], 1, 2]", ["found 6 by position", "at most 5", "vx, vy"]),
        ("walk", '{"pivot": [0, 0, 0]}', ["pivot", "two numbers"]),
        ("walk", '{"pivot": [0, false]}', ["pivot", "two numbers"]),
        ("walk", '{"pivot": {"x": 1}}', ["pivot", "two numbers"]),
        ("walk", '{"ttl_s": 0}', ["ttl_s", "found 0", "0.05 to 10 s"]),
        ("stand", '{"now": true}', ['"now"', "no such parameter", "none"]),
        ("stand", "[1]", ["found 1 by position", "at most 0", "none"]),
        ("gait", "{}", ["name", "missing", "text"]),
        ("gait", '{"name": null}', ["name", "missing"]),
        ("gait", '{"name": ""}', ["name", '""', "1 to 64"]),
        ("gait", '{"name": "a\\nb"}', ["name", "printable"]),
        ("stop", '{"category": 2}', ["category", "found 2", "whole number, 0 to 1"]),
        ("stop", '{"category": 1.0}', ["category", "found 1.0", "whole number"]),
        ("stop", '{"category": true}', ["category", "found true", "whole number"]),
        ("route", "{}", ["none", "exactly one of steps and cancel"]),
        ("route", '{"steps": [{}], "cancel": true}', ["steps, cancel", "exactly one of"]),
        ("route", '{"cancel": false}', ["cancel", "found false", "allowed: true"]),
        ("route", '{"steps": []}', ["steps", "1 to 1000 objects"]),
        ("route", '{"steps": [1]}', ["steps", "objects"]),
        ("watch", '{"rate_hz": -1}', ["rate_hz", "found -1", "0 to 100 Hz"]),
        ("walk", '{"vx": "%s"}' % ("x" * 5000), ["vx", "x...", "a number"]),
    ],
)
def test_wrong_parameters_are_named_with_what_was_found_and_what_is_allowed(
    method: str, params: str, words: list[str]
) -> None:
    _, message = _params(method, params)
    assert [word for word in words if word not in message] == []
    assert len(message) < 300


@pytest.mark.parametrize(
    ("line", "code", "given_on"),
    [
        ('"method": "stop", "params": {"category": 7}', -32602, {"category": 1, "reason": ""}),
        ('"method": "stop", "params": {"category": 0, "reason": 5}', -32602, {"category": 0, "reason": ""}),
        ('"method": "stop", "params": {"why": "smoke"}', -32602, {"category": 1, "reason": ""}),
        ('"method": "stop", "params": [0, "smoke", 1]', -32602, {"category": 0, "reason": "smoke"}),
        ('"method": "stop", "params": "now"', -32600, {"category": 1, "reason": ""}),
        ('"method": "stop", "id": {}', -32600, {"category": 1, "reason": ""}),
        ('"method": "stop", "token": 1, "params": [0]', -32600, {"category": 0, "reason": ""}),
    ],
)
def test_a_stop_is_carried_out_even_when_it_is_asked_for_wrongly(
    line: str, code: int, given_on: dict[str, object]
) -> None:
    handler = Recorder()
    with_id = line if '"id"' in line else f'{line}, "id": 1'
    answer = _ask(f'{{"jsonrpc": "2.0", {with_id}}}', handler)
    assert isinstance(answer, dict)
    assert answer["error"]["code"] == code
    assert "Carried out nevertheless" in answer["error"]["data"]["detail"]
    assert handler.calls == [("stop", given_on)]


def test_a_wrong_stop_that_fails_is_not_called_carried_out() -> None:
    told: list[str] = []
    protocol = Protocol(Recorder(KeyError("bug")), on_error=lambda where, _error: told.append(where))
    answer = protocol.answer(b'{"jsonrpc": "2.0", "method": "stop", "params": [9], "id": 1}')
    assert answer is not None
    assert b"Carried out" not in answer
    assert told == ["request stop"]
    refuses = Protocol(Recorder(errors.StateError("no")), on_error=lambda where, _error: told.append(where))
    answer = refuses.answer(b'{"jsonrpc": "2.0", "method": "stop", "params": [9], "id": 1}')
    assert answer is not None
    assert b"Carried out" not in answer
    assert len(told) == 1  # a refusal is no bug


def test_only_a_stop_is_carried_out_when_wrong() -> None:
    for name in METHODS.keys() - {"stop"}:
        handler = Recorder()
        _ask(f'{{"jsonrpc": "2.0", "method": "{name}", "params": {{"no": 1}}, "id": 1}}', handler)
        assert handler.calls == []


def test_the_table_describes_itself() -> None:
    listed = json.loads(json.dumps(describe()))
    assert [method["name"] for method in listed] == list(METHODS)
    assert all(param["doc"] and param["allowed"] for method in listed for param in method["params"])
    table = markdown()
    assert all(f"`{method.name}`" in table for method in METHODS.values())
    assert {line.count("|") for line in table.splitlines()} == {6}


def test_defaults_of_the_table_fit_the_table() -> None:
    for method in METHODS.values():
        for param in method.params:
            if param.default is not None:
                default = list(param.default) if isinstance(param.default, tuple) else param.default
                assert param.check(default) == param.default


# --- properties ---------------------------------------------------------------------------------------

_JSON = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(),
    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.text(max_size=5), inner, max_size=4),
    max_leaves=12,
)
_REQUESTS = st.fixed_dictionaries(
    {},
    optional={
        "jsonrpc": st.just("2.0") | _JSON,
        "method": st.sampled_from([*METHODS, "rpc.x"]) | _JSON,
        "params": st.dictionaries(
            st.sampled_from(sorted({param.name for method in METHODS.values() for param in method.params})),
            _JSON,
        )
        | st.lists(_JSON, max_size=6)
        | _JSON,
        "id": st.integers(0, 9) | _JSON,
        "parms": _JSON,
    },
)
_LINES = (
    st.binary(max_size=200)
    | st.text(max_size=200).map(lambda text: text.encode("utf-8", "surrogatepass"))
    | (_REQUESTS | st.lists(_REQUESTS, max_size=20) | _JSON).map(lambda value: json.dumps(value).encode())
)


@given(_LINES, st.sampled_from([None, {"a": 1.5}, errors.StateError("no"), ValueError("bug"), math.inf]))
@example(b"\x00", None)
@example(b"[[[[[[[[[[[[[[[[[[[[[[[[[[[[[[[[[[", None)
def test_any_line_has_a_valid_answer_or_none(line: bytes, result: object) -> None:
    protocol = Protocol(Recorder(result), on_error=lambda _where, _error: None)
    assert_answer_is_valid(protocol.answer(line))


@given(_LINES)
def test_what_is_read_is_what_the_json_library_reads(line: bytes) -> None:
    """`json` of the standard library as the judge: the limits refuse, they never alter."""
    try:
        read = parse(line)
    except BadLineError:
        return
    assert json.dumps(read) == json.dumps(json.loads(line.decode()))


@given(st.lists(_REQUESTS, min_size=1, max_size=MAX_BATCH))
def test_a_batch_is_answered_like_its_calls_one_by_one(requests: list[dict[str, object]]) -> None:
    protocol = Protocol(Recorder({"a": 1}))
    try:
        parse(json.dumps(requests).encode())
    except BadLineError:
        return
    singles = [protocol.answer(json.dumps(request).encode()) for request in requests]
    answers = [json.loads(single) for single in singles if single is not None]
    batch = protocol.answer(json.dumps(requests).encode())
    assert (None if batch is None else json.loads(batch)) == (answers or None)
