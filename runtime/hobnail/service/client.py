"""The Python face of the local socket: one blocking method a request, SI units, body frame.

Nothing here reconnects, repeats a request or keeps a command alive by itself:
a robot must not go on moving because a program is clever.  No numpy is loaded.
"""

from __future__ import annotations

import contextlib
import grp
import json
import pwd
import socket
import time
from collections import deque
from collections.abc import Iterator, Sequence
from pathlib import Path
from types import TracebackType
from typing import NoReturn, Self

from hobnail import errors
from hobnail.service import socket_file

MAX_ANSWER = 8 * 1024 * 1024  # bytes of one line; more is not a service of ours
MAX_STATES = 64  # kept while an answer is waited for; older ones are forgotten
_CHUNK = 65536

_CLASSES: dict[int, type[errors.HobnailError]] = {
    -32700: errors.ProtocolError,
    -32600: errors.ProtocolError,
    -32601: errors.ProtocolError,
    -32602: errors.CommandError,
    -32603: errors.ServiceError,
    -32000: errors.StateError,
    -32001: errors.StoppedError,
    -32002: errors.CommanderError,
    -32003: errors.FaultError,
    -32004: errors.CommandError,
    -32005: errors.ServiceError,
}


class Client:
    """A connection to the running robot; a context manager.

    Each method raises what the service answered, as a class of `hobnail.errors`
    whose text ends in the next step; ServiceUnavailableError when nothing
    answers, ServiceTimeoutError when the answer takes longer than `timeout_s`,
    ProtocolError when it is no JSON-RPC.  For use by one thread: a second one
    opens a client of its own.
    """

    def __init__(self, socket_path: str | Path | None = None, timeout_s: float = 2.0) -> None:
        """Connect to `socket_path`, by default where `socket_file.default_path` says."""
        self.path = Path(socket_path) if socket_path is not None else socket_file.default_path()
        self.timeout_s = timeout_s
        self._last_id = 0
        self._inbox = bytearray()
        self._states: deque[dict[str, object]] = deque(maxlen=MAX_STATES)
        self._socket = socket.socket(socket.AF_UNIX, socket.SOCK_STREAM)
        self._socket.settimeout(timeout_s)
        try:
            self._socket.connect(str(self.path))
        except OSError as error:
            self._socket.close()
            _explain(self.path, error)

    def close(self) -> None:
        """Close the connection; a claim to command is given up with it."""
        self._socket.close()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    # --- requests -----------------------------------------------------------------------------

    def walk(
        self,
        vx: float,
        vy: float,
        yaw_rate: float,
        pivot: tuple[float, float] = (0.0, 0.0),
        ttl_s: float | None = None,
    ) -> object:
        """Move at `vx`, `vy` (m/s) and `yaw_rate` (rad/s), given at `pivot` (m), for `ttl_s` (s)
        or as long as the robot's configuration says; send it again before that to go on."""
        return self.call("walk", vx=vx, vy=vy, yaw_rate=yaw_rate, pivot=list(pivot), ttl_s=ttl_s)

    def stand(self) -> object:
        """Wake, rise or stop walking, and stand."""
        return self.call("stand")

    def rest(self) -> object:
        """Lie down, pulses on."""
        return self.call("rest")

    def off(self) -> object:
        """Lie down, then end all pulses."""
        return self.call("off")

    def posture(
        self,
        *,
        height_m: float | None = None,
        roll_rad: float | None = None,
        pitch_rad: float | None = None,
        yaw_rad: float | None = None,
        lean_m: tuple[float, float] | None = None,
    ) -> object:
        """Move the body over its feet (m, rad); None leaves as it is."""
        lean = None if lean_m is None else list(lean_m)
        return self.call(
            "posture", height_m=height_m, roll_rad=roll_rad, pitch_rad=pitch_rad, yaw_rad=yaw_rad, lean_m=lean
        )

    def gait(self, name: str) -> object:
        """Change the gait."""
        return self.call("gait", name=name)

    def stop(self, category: int = 1, reason: str = "") -> object:
        """Stop and latch: category 0 ends all pulses at once, 1 plants the feet and crouches first."""
        return self.call("stop", category=category, reason=reason)

    def reset(self) -> object:
        """Clear a latched stop; moves nothing."""
        return self.call("reset")

    def state(self) -> dict[str, object]:
        """Everything there is to know about this moment."""
        return self._object("state", self.call("state"))

    def describe(self) -> dict[str, object]:
        """What the robot is and can do."""
        return self._object("describe", self.call("describe"))

    def route(self, steps: Sequence[dict[str, object]] | None = None, *, cancel: bool = False) -> object:
        """Walk a list of steps as in a route file, or give up the one being walked."""
        return self.call("route", steps=None if steps is None else list(steps), cancel=cancel or None)

    def watch(self, rate_hz: float = 10.0) -> Iterator[dict[str, object]]:
        """States as they come, until the iterator is closed or the service ends.

        Other requests may be made meanwhile.  Raises ServiceTimeoutError when
        none comes for `timeout_s` beyond the time between two.
        """
        self.call("watch", rate_hz=rate_hz)
        patience_s = self.timeout_s + (1.0 / rate_hz if rate_hz > 0.0 else 0.0)
        try:
            while True:
                deadline_s = time.monotonic() + patience_s
                while not self._states:
                    self._keep_state(self._read(deadline_s, "watch"))
                yield self._states.popleft()
        except GeneratorExit:
            # The service may be gone, or the client be closed: then there is nothing to end.
            with contextlib.suppress(errors.HobnailError):
                self.call("watch", rate_hz=0.0)
            raise

    # --- the wire -----------------------------------------------------------------------------

    def call(self, method: str, **params: object) -> object:
        """Make a request by name; parameters that are None are left out."""
        self._last_id += 1
        given = {name: value for name, value in params.items() if value is not None}
        request = {"jsonrpc": "2.0", "method": method, "params": given, "id": self._last_id}
        try:
            text = json.dumps(request, allow_nan=False, default=float)  # float: for numpy's scalars
            line = text.encode("ascii") + b"\n"
        except (TypeError, ValueError) as error:
            raise errors.CommandError(
                f"{method}: {_shown(given)} cannot be sent: {error}. Use finite numbers, texts and lists"
            ) from None
        deadline_s = time.monotonic() + self.timeout_s
        try:
            self._socket.settimeout(self.timeout_s)
            self._socket.sendall(line)
        except TimeoutError:
            self.close()  # half a line may be on its way: nothing can follow it
            self._too_late(method)
        except OSError as error:
            self._gone(error, method, deadline_s)
        while True:
            answer = self._read(deadline_s, method)
            if "method" in answer:
                self._keep_state(answer)
                continue
            answered = answer.get("id")
            # An answer to an earlier request that was given up; null: to something we did not ask.
            if isinstance(answered, int) and answered < self._last_id:
                continue
            if "error" in answer:
                raise _error(answer["error"])
            if answered != self._last_id or "result" not in answer:
                raise errors.ProtocolError(
                    f"{self.path} answered {_shown(answer)} to {method}: no answer to that"
                )
            return answer["result"]

    def _keep_state(self, message: dict[str, object]) -> None:
        params = message.get("params")
        if message.get("method") == "state" and isinstance(params, dict):
            self._states.append(params)
        elif "error" in message and message.get("id") is None:
            raise _error(message["error"])

    def _read(self, deadline_s: float, method: str) -> dict[str, object]:
        while (end := self._inbox.find(b"\n")) < 0:
            left_s = deadline_s - time.monotonic()
            if left_s <= 0.0:
                self._too_late(method)
            if len(self._inbox) > MAX_ANSWER:
                raise errors.ProtocolError(
                    f"{self.path} sent a line of more than {MAX_ANSWER} bytes: no service of ours"
                )
            try:
                self._socket.settimeout(left_s)
                chunk = self._socket.recv(_CHUNK)
            except TimeoutError:
                self._too_late(method)
            except OSError as error:
                raise self._unavailable(error.strerror or str(error)) from error
            if not chunk:
                raise self._unavailable("it closed the connection")
            self._inbox += chunk
        line = bytes(self._inbox[:end])
        del self._inbox[: end + 1]
        try:
            message = json.loads(line.decode("utf-8"))
        except (ValueError, RecursionError):
            message = None
        if not isinstance(message, dict) or message.get("jsonrpc") != "2.0":
            raise errors.ProtocolError(
                f"{self.path} sent {line[:60]!r}: no JSON-RPC 2.0, so no service of ours"
            )
        return message

    def _gone(self, error: OSError, method: str, deadline_s: float) -> NoReturn:
        """The service has closed the connection; it may have said why before it did."""
        with contextlib.suppress(errors.ServiceUnavailableError, errors.ServiceTimeoutError):
            while True:
                message = self._read(deadline_s, method)
                if "error" in message and message.get("id") is None:
                    raise _error(message["error"])
        raise self._unavailable(error.strerror or str(error)) from error

    def _unavailable(self, why: str) -> errors.ServiceUnavailableError:
        return errors.ServiceUnavailableError(
            f"the service on {self.path} is gone ({why}): see `systemctl status hobnail` or its terminal, "
            "then connect again"
        )

    def _too_late(self, method: str) -> NoReturn:
        raise errors.ServiceTimeoutError(
            f"the service on {self.path} did not answer {method} within {self.timeout_s:g} s: it may be "
            "overloaded or hang; see its log, and stop the robot by its switch if need be"
        )

    def _object(self, method: str, result: object) -> dict[str, object]:
        if not isinstance(result, dict):
            raise errors.ProtocolError(
                f"{self.path} answered {_shown(result)} to {method}: expected an object"
            )
        return result


def _shown(value: object) -> str:
    text = repr(value)
    return text if len(text) <= 80 else f"{text[:80]}..."


def _error(error: object) -> errors.HobnailError:
    """The error that the service answered, as the class it had there."""
    code = error.get("code") if isinstance(error, dict) else None
    if not isinstance(error, dict) or not isinstance(code, int) or not isinstance(error.get("message"), str):
        return errors.ProtocolError(f"the service answered the error {_shown(error)}: no JSON-RPC 2.0")
    text = error["message"]
    data = error.get("data")
    if isinstance(data, dict):
        if isinstance(data.get("detail"), str) and data["detail"] != text:
            text = f"{text}: {data['detail']}"
        if data.get("next") and isinstance(data["next"], str) and not text.endswith(data["next"]):
            text = f"{text}. Next: {data['next']}"
    made = _CLASSES.get(code, errors.ServiceError)(text)
    if isinstance(data, dict) and isinstance(data.get("cause"), str):
        made.cause = data["cause"]
    return made


def _explain(path: Path, error: OSError) -> NoReturn:
    """Say in words why nothing could be connected to."""
    if isinstance(error, PermissionError):
        unavailable = errors.ServiceUnavailableError(f"no permission to open {path}{_owner(path)}")
        unavailable.exit_code = errors.EX_NOPERM
        raise unavailable from error
    if isinstance(error, (FileNotFoundError, NotADirectoryError, ConnectionRefusedError)):
        raise errors.ServiceUnavailableError(
            f"no service answers on {path}: start it with `hobnail run CONFIG` or `systemctl start hobnail`, "
            "or name its socket with --socket"
        ) from error
    if isinstance(error, (TimeoutError, BlockingIOError)):
        raise errors.ServiceTimeoutError(
            f"the service on {path} takes in no more clients: it may be overloaded or hang; see its log"
        ) from error
    raise errors.ServiceUnavailableError(
        f"cannot open {path}: {error.strerror or error}. Name the service's socket with --socket"
    ) from error


def _owner(path: Path) -> str:
    try:
        found = path.stat()
        group = grp.getgrgid(found.st_gid).gr_name
        user = pwd.getpwuid(found.st_uid).pw_name
    except (OSError, KeyError):
        return ": join the service's group (`usermod -aG GROUP USER`, then log in again), or use its user"
    return (
        f": it is for user {user} and group {group}. Join that group (`usermod -aG {group} USER`, then "
        "log in again)"
    )
