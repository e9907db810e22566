"""JSON-RPC 2.0: the bytes of one line in, the bytes of its answer out; no socket, no clock.

A line is one JSON text in UTF-8 (NDJSON), a request or a batch.  Texts are
limited in size, depth and number range as RFC 8259 section 9 lets a parser do;
names that occur twice in an object are refused, as its section 4 lets one do.
Whatever the bytes are, nothing is raised: each line has an answer, or none
where the specification wants none.
"""

from __future__ import annotations

import json
import logging
import math
import re
from collections.abc import Callable, Collection, Mapping
from typing import NoReturn

from hobnail import errors
from hobnail.service.methods import METHODS, Method, ParamsError, nearest, shown

Params = dict[str, object] | list[object] | None
Handler = Callable[[str, Params, int], object]
"""(method, parameters by name, client) -> a JSON-able result; raises HobnailError."""
ErrorSink = Callable[[str, BaseException], None]
"""(where, error): told of what should not happen; must not block."""

MAX_DEPTH = 16  # of arrays and objects within each other
MAX_VALUES = 4096  # of one line; a bound on the time to read it
MAX_BATCH = 16  # calls in a batch
MAX_NUMBER_CHARS = 40
MAX_INTEGER_CHARS = 20  # 64 bits, signed or not
MAX_MESSAGE_CHARS = 4000

PARSE_ERROR = -32700
INVALID_REQUEST = -32600
METHOD_NOT_FOUND = -32601
INVALID_PARAMS = -32602
INTERNAL_ERROR = -32603
STATE = -32000
STOPPED = -32001
COMMANDER = -32002
FAULT = -32003
VALUE = -32004
SERVICE = -32005

# The texts of the specification, where it gives them in its examples or table.
_MESSAGES = {
    PARSE_ERROR: "Parse error",
    INVALID_REQUEST: "Invalid Request",
    METHOD_NOT_FOUND: "Method not found",
    INTERNAL_ERROR: "Internal error",
}

# Most specific first: the code, and what to do next unless the error says better.
_CODES: tuple[tuple[type[errors.HobnailError], int, str], ...] = (
    (errors.StoppedError, STOPPED, "send `reset`, then `stand`, then a fresh command"),
    (errors.StateError, STATE, "see `state`, then bring the robot into a state that allows this"),
    (errors.CommanderError, COMMANDER, "wait until the claim lapses, or end the other commander"),
    (errors.FaultError, FAULT, "see `faults` in `state`, mend the cause, then `reset`"),
    (errors.CommandError, VALUE, "correct the value"),
    (errors.ConfigError, VALUE, "correct the value"),
    (errors.HobnailError, SERVICE, "see the service's log"),
)


_Error = tuple[int, str, dict[str, object]]  # code, message, data


class BadLineError(ValueError):
    """A line that is no JSON text, or one beyond the limits."""


class _RefusedError(Exception):
    """Ends a call with one of the specification's own errors."""

    def __init__(self, code: int, cause: str, detail: str, next_step: str) -> None:
        super().__init__(detail)
        self.code = code
        self.cause = cause
        self.detail = detail
        self.next_step = next_step

    def error(self, more: str = "") -> _Error:
        detail = self.detail + more
        data: dict[str, object] = {"cause": self.cause, "detail": detail, "next": self.next_step}
        return self.code, _MESSAGES.get(self.code, detail), data


# --- reading ---------------------------------------------------------------------------------


def _float(text: str) -> float:
    value = float(text[: MAX_NUMBER_CHARS + 1])
    if len(text) > MAX_NUMBER_CHARS or not math.isfinite(value):
        raise BadLineError(f"number {text[:MAX_NUMBER_CHARS]} is too long or out of the range of a double")
    return value


def _int(text: str) -> int:
    if len(text) > MAX_INTEGER_CHARS:
        raise BadLineError(f"whole number {text[:MAX_NUMBER_CHARS]} has more than {MAX_INTEGER_CHARS} digits")
    return int(text)


def _constant(text: str) -> NoReturn:
    raise BadLineError(f"{text} is not JSON")


def _object(pairs: list[tuple[str, object]]) -> dict[str, object]:
    members = dict(pairs)
    if len(members) < len(pairs):
        seen: set[str] = set()
        for name, _ in pairs:
            if name in seen:
                raise BadLineError(f"member {shown(name)} occurs twice")
            seen.add(name)
    return members


_DECODER = json.JSONDecoder(
    object_pairs_hook=_object, parse_float=_float, parse_int=_int, parse_constant=_constant
)
_ENCODER = json.JSONEncoder(allow_nan=False)

# A whole string, or an unfinished one up to the end, is one match: linear in any input.
_STRING = re.compile(rb'"[^"\\]*+(?:\\.[^"\\]*+)*+"?', re.DOTALL)
_TO_SQUARE = bytes.maketrans(b"{}", b"[]")
_NO_BRACKET = bytes(set(range(256)) - set(b"[]{}"))


def _is_too_deep(line: bytes) -> bool:
    brackets = _STRING.sub(b"", line).translate(_TO_SQUARE, _NO_BRACKET)
    for _ in range(MAX_DEPTH):
        brackets = brackets.replace(b"[]", b"")  # the innermost level
    return b"[]" in brackets  # what else is left does not match, and is no JSON


def parse(line: bytes) -> object:
    """The JSON value of a line; BadLineError when it is none or exceeds a limit."""
    opened = line.count(b"[") + line.count(b"{")
    if opened + line.count(b",") > MAX_VALUES:
        raise BadLineError(f"more than {MAX_VALUES} values in a line")
    if opened > MAX_DEPTH and _is_too_deep(line):
        raise BadLineError(f"nested more than {MAX_DEPTH} deep")
    try:
        value = _DECODER.decode(line.decode("utf-8"))
        if b"\\u" in line:  # an escape may have made half a surrogate pair, which is no text
            json.dumps(value, ensure_ascii=False).encode("utf-8")
    except UnicodeDecodeError as error:
        raise BadLineError(f"byte {error.start + 1} is not UTF-8") from None
    except UnicodeEncodeError:
        raise BadLineError("half of a surrogate pair in a string") from None
    except json.JSONDecodeError as error:
        raise BadLineError(f"character {error.pos + 1}: {error.msg}") from None
    except RecursionError:
        raise BadLineError("nested too deep") from None
    return value


# --- writing ---------------------------------------------------------------------------------


def result_text(request_id: object, result: object) -> str:
    """An answer; TypeError or ValueError when the result is no JSON (NaN is none)."""
    return f'{{"jsonrpc": "2.0", "result": {_ENCODER.encode(result)}, "id": {_ENCODER.encode(request_id)}}}'


def error_text(request_id: object, code: int, message: str, data: Mapping[str, object]) -> str:
    """An error answer."""
    error = {"code": code, "message": message[:MAX_MESSAGE_CHARS], "data": data}
    return f'{{"jsonrpc": "2.0", "error": {_ENCODER.encode(error)}, "id": {_ENCODER.encode(request_id)}}}'


def notification(method: str, params: Mapping[str, object]) -> bytes:
    """A notification to a client; TypeError or ValueError when `params` is no JSON."""
    return b'{"jsonrpc": "2.0", "method": %b, "params": %b}' % (
        _ENCODER.encode(method).encode("ascii"),
        _ENCODER.encode(params).encode("ascii"),
    )


def bad_line(detail: str) -> bytes:
    """The answer to a line that cannot be read."""
    data = {"cause": "parse", "detail": detail, "next": "send one JSON text a line, in UTF-8"}
    return error_text(None, PARSE_ERROR, _MESSAGES[PARSE_ERROR], data).encode("ascii")


def service_error(detail: str, next_step: str) -> bytes:
    """An error to a client that asked nothing: it is refused, or dropped."""
    return error_text(None, SERVICE, detail, {"cause": "service", "next": next_step}).encode("ascii")


def log_error(where: str, error: BaseException) -> None:
    """The error sink for when there is no better one: the log."""
    logging.getLogger("hobnail.service").error("%s: %s: %s", where, type(error).__name__, error)


# --- one call --------------------------------------------------------------------------------

_MEMBERS = ("jsonrpc", "method", "params", "id")


def _invalid(detail: str) -> _RefusedError:
    return _RefusedError(INVALID_REQUEST, "request", detail, "send a JSON-RPC 2.0 request object")


def _id_of(request: object) -> object:
    """The id as it is to be given back: null where there is none or a wrong one."""
    request_id = request.get("id") if isinstance(request, dict) else None
    if isinstance(request_id, (str, int, float)) and not isinstance(request_id, bool):
        return request_id
    return None


def _checked_request(request: object) -> dict[str, object]:
    """The request object; _RefusedError when it is not one as section 4 of the specification has it."""
    if not isinstance(request, dict):
        raise _invalid(f"found {shown(request)}; allowed: an object")
    for name in request:
        if name not in _MEMBERS:
            raise _invalid(f"{shown(name)}: no such member{nearest(name, _MEMBERS)}")
    if request.get("jsonrpc") != "2.0":
        raise _invalid(f'jsonrpc: found {shown(request.get("jsonrpc"))}; allowed: "2.0"')
    if not isinstance(request.get("method"), str):
        raise _invalid(f"method: found {shown(request.get('method'))}; allowed: a name")
    if not isinstance(request.get("params", {}), (dict, list)):
        raise _invalid(f"params: found {shown(request['params'])}; allowed: an object or an array")
    if _id_of(request) is None and request.get("id") is not None:
        raise _invalid(f"id: found {shown(request['id'])}; allowed: a string, a number or null")
    return request


class Protocol:
    """Answers lines by way of a handler and the table of methods.

    `always` names methods that are carried out even when the request is wrong
    otherwise, with those of its parameters that are right, so that a slip of the
    pen does not hinder a stop; the answer is an error all the same.
    """

    def __init__(
        self,
        handler: Handler,
        *,
        methods: Mapping[str, Method] = METHODS,
        always: Collection[str] = ("stop",),
        on_error: ErrorSink = log_error,
    ) -> None:
        self._handler = handler
        self._methods = methods
        self._always = methods.keys() & set(always)
        self._on_error = on_error

    def answer(self, line: bytes, client_id: int = 0) -> bytes | None:
        """The answer to a line, without its line end; None where there is none to be given."""
        exchange = Exchange(self, line, client_id)
        while not exchange.step():
            pass
        return exchange.answer

    def respond(self, request: object, client_id: int) -> str | None:
        """The answer to one request object; None for a notification."""
        silent = False
        try:
            checked = _checked_request(request)
            silent = "id" not in checked
            result = self._call(checked["method"], checked.get("params"), client_id)
            return None if silent else result_text(checked.get("id"), result)
        except _RefusedError as error:
            carried_out = self._carried_out_anyway(request, client_id)
            refusal = error.error(". Carried out nevertheless, with what was right" if carried_out else "")
        except errors.HobnailError as error:
            refusal = _own_error(error)
        except Exception as error:  # noqa: BLE001 a bug in a handler must not end the service
            self._on_error(f"request {shown(request)}", error)
            refusal = _RefusedError(
                INTERNAL_ERROR, "internal", "the service made a mistake", "see its log"
            ).error()
        return None if silent else error_text(_id_of(request), *refusal)

    def _call(self, name: object, params: object, client_id: int) -> object:
        method = self._methods.get(name) if isinstance(name, str) else None
        if method is None:
            raise _RefusedError(
                METHOD_NOT_FOUND,
                "method",
                f"{shown(name)}: no such method{nearest(str(name), self._methods)}",
                f"use one of {', '.join(self._methods)}",
            )
        try:
            checked = method.check(params if isinstance(params, (dict, list)) else None)
        except ParamsError as error:
            raise _RefusedError(INVALID_PARAMS, "params", str(error), "correct the parameters") from None
        return self._handler(method.name, checked, client_id)

    def _carried_out_anyway(self, request: object, client_id: int) -> bool:
        name = request.get("method") if isinstance(request, dict) else None
        if not isinstance(request, dict) or not isinstance(name, str) or name not in self._always:
            return False
        try:
            self._handler(name, self._methods[name].salvage(request.get("params")), client_id)
        except errors.HobnailError:
            return False
        except Exception as error:  # noqa: BLE001 the answer is an error already
            self._on_error(f"request {name}", error)
            return False
        return True


def _own_error(error: errors.HobnailError) -> _Error:
    code, next_step = next((code, next_step) for kind, code, next_step in _CODES if isinstance(error, kind))
    message = str(error) or error.cause
    # A message that says itself what to do says it last, after a semicolon.
    next_step = message.rpartition("; ")[2] if "; " in message else next_step
    return code, message, {"cause": error.cause, "next": next_step}


class Exchange:
    """One line being answered, a call at a time, so that a batch cannot hold up its caller.

    `calls` is how many the line holds; `garbage` tells a line that is no
    request at all.  `answer` is there once `step` has returned True.
    """

    __slots__ = ("_answers", "_client_id", "_protocol", "_requests", "answer", "batch", "calls", "garbage")

    def __init__(self, protocol: Protocol, line: bytes, client_id: int) -> None:
        self._protocol = protocol
        self._client_id = client_id
        self._answers: list[str] = []
        self._requests: list[object] = []  # what is left to do, last first
        self.answer: bytes | None = None
        self.batch = False
        self.garbage = False
        try:
            value = parse(line)
        except BadLineError as error:
            self.garbage = True
            self.answer = bad_line(str(error))
        else:
            self.batch = isinstance(value, list) and 0 < len(value) <= MAX_BATCH
            if self.batch and isinstance(value, list):
                self._requests = value[::-1]
            elif isinstance(value, list):
                found = f"a batch of {len(value)}; allowed: 1 to {MAX_BATCH} requests"
                self.answer = error_text(None, *_invalid(f"found {found}").error()).encode("ascii")
            else:
                self.garbage = not isinstance(value, dict)
                self._requests = [value]
        self.calls = len(self._requests)

    def step(self) -> bool:
        """Carry out at most one call; True when the answer is complete."""
        if self._requests:
            answer = self._protocol.respond(self._requests.pop(), self._client_id)
            if answer is not None:
                self._answers.append(answer)
            if not self._requests and self._answers:
                text = ", ".join(self._answers)
                self.answer = (f"[{text}]" if self.batch else text).encode("ascii")
        return not self._requests
