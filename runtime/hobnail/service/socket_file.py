"""The socket in the file system: where it is, who may open it, and whether a service already does.

Nothing here accepts or speaks; `server` and `client` do.
"""

from __future__ import annotations

import errno
import fcntl
import grp
import os
import socket
import stat
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path

from hobnail.errors import EX_NOPERM, ServiceError

NAME = "hobnail.sock"
SYSTEM_PATH = Path("/run/hobnail") / NAME
MAX_PATH_BYTES = 107  # unix(7): sun_path, less the NUL
_MODE = 0o660
_BACKLOG = 64


def default_path(environ: Mapping[str, str] = os.environ) -> Path:
    """Where the socket is when nobody says: $HOBNAIL_SOCKET, else in $RUNTIME_DIRECTORY (the
    service manager sets it), else the system's if it is there, else in the user's runtime directory."""
    if environ.get("HOBNAIL_SOCKET"):
        return Path(environ["HOBNAIL_SOCKET"])
    if environ.get("RUNTIME_DIRECTORY"):
        return Path(environ["RUNTIME_DIRECTORY"].split(":")[0]) / NAME
    if _is_there(SYSTEM_PATH):
        return SYSTEM_PATH
    if environ.get("XDG_RUNTIME_DIR"):
        return Path(environ["XDG_RUNTIME_DIR"]) / NAME
    return Path(f"/tmp/hobnail-{os.getuid()}") / NAME


def _is_there(path: Path) -> bool:
    try:
        return path.exists()
    except PermissionError:  # a directory that is for others: whoever opens it is told which group
        return True


def listen(path: Path, *, group: str | None = None) -> socket.socket:
    """A listening socket at `path`, mode 0660, its directory made where it is missing.

    It appears under its name only when it can be connected to and has its
    rights.  A stale one is replaced.
    Raises ServiceError: another service answers there, something else has that
    name, no permission, no such group, the path is too long.
    """
    temporary = path.with_name(f".{os.getpid()}")
    if len(os.fsencode(path)) > MAX_PATH_BYTES or len(os.fsencode(temporary)) > MAX_PATH_BYTES:
        raise ServiceError(
            f"socket path {path} is {len(os.fsencode(path))} bytes long; allowed: about {MAX_PATH_BYTES}. "
            "Choose a shorter one with --socket"
        )
    group_id = _group_id(group)
    try:
        _make_directory(path.parent, group_id)
        with _locked(path.parent):
            _refuse_living(path)
            return _bound(path, temporary, group_id)
    except OSError as error:
        failure = ServiceError(f"cannot make the socket {path}: {error.strerror}{_advice(error, group)}")
        if isinstance(error, PermissionError):
            failure.exit_code = EX_NOPERM
        raise failure from error


def answers(path: Path) -> bool:
    """Whether a service answers there.  Raises OSError when that cannot be found out."""
    with socket.socket(socket.AF_UNIX, socket.SOCK_STREAM) as probe:
        probe.setblocking(False)
        failed = probe.connect_ex(str(path))
    if failed in (0, errno.EAGAIN):  # EAGAIN: it listens, and more wait than it takes in
        return True
    if failed not in (errno.ECONNREFUSED, errno.ENOENT, errno.ENOTDIR):
        raise OSError(failed, os.strerror(failed), str(path))
    return False


@contextmanager
def kept_free(path: Path) -> Iterator[None]:
    """No service starts at `path` while this lasts: for whoever drives the servos without one.

    Makes the directory where it is missing.  Raises ServiceError: a service
    answers there, or is about to; OSError when that cannot be found out.
    """
    _make_directory(path.parent, -1)
    with _locked(path.parent):
        if answers(path):
            raise ServiceError(
                f"the robot's service answers on {path}, and two programs must not drive the servos: end it "
                "first, with `systemctl stop hobnail`, or with Ctrl-C where `hobnail run` runs"
            )
        yield


def _advice(error: OSError, group: str | None) -> str:
    if not isinstance(error, PermissionError):
        return ""
    if group is not None and group not in _own_groups():
        return f". This user is not in the group {group}: add it, or choose another group"
    return ". Choose a place that this user may write to with --socket"


def _own_groups() -> set[str]:
    names = set()
    for group_id in {os.getegid(), *os.getgroups()}:
        try:
            names.add(grp.getgrgid(group_id).gr_name)
        except KeyError:
            continue
    return names


def _group_id(group: str | None) -> int:
    if group is None:
        return -1
    try:
        return grp.getgrnam(group).gr_gid
    except KeyError:
        raise ServiceError(
            f"there is no group {group} on this machine: make it with `groupadd --system {group}`, "
            "or choose another"
        ) from None


def _make_directory(directory: Path, group_id: int) -> None:
    try:
        directory.mkdir(parents=True, mode=0o700 if group_id < 0 else 0o750)
    except FileExistsError:
        found = directory.stat()
        if not stat.S_ISDIR(found.st_mode):
            raise ServiceError(f"{directory} is no directory: choose another place with --socket") from None
        # Who can rename in the directory can take the place of the socket.
        foreign = os.geteuid() != 0 and found.st_uid not in (0, os.geteuid())
        if foreign or (found.st_mode & stat.S_IWOTH and not found.st_mode & stat.S_ISVTX):
            raise ServiceError(
                f"{directory} can be changed by other users: choose another place with --socket"
            ) from None
        return
    if group_id >= 0:
        os.chown(directory, -1, group_id)


@contextmanager
def _locked(directory: Path) -> Iterator[None]:
    """Keeps two services that start at once from replacing each other's socket."""
    lock = os.open(directory, os.O_RDONLY | os.O_DIRECTORY)
    try:
        try:
            fcntl.flock(lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            raise ServiceError(
                f"another program is starting or calibrating a robot in {directory}: end it, or try again"
            ) from None
        yield
    finally:
        os.close(lock)


def _refuse_living(path: Path) -> None:
    try:
        kind = path.lstat().st_mode
    except FileNotFoundError:
        return
    if not stat.S_ISSOCK(kind):
        raise ServiceError(f"{path} is there already and is no socket: remove it, or choose another path")
    if answers(path):
        raise ServiceError(f"a service already answers on {path}: stop it first, or choose another path")


def _bound(path: Path, temporary: Path, group_id: int) -> socket.socket:
    listener = socket.socket(socket.AF_UNIX, socket.SOCK_STREAM)
    try:
        temporary.unlink(missing_ok=True)
        listener.setblocking(False)
        listener.bind(str(temporary))
        try:
            if group_id >= 0:
                os.chown(temporary, -1, group_id)
            temporary.chmod(_MODE)
            listener.listen(_BACKLOG)  # nobody can connect before
            temporary.rename(path)
        except OSError:
            temporary.unlink(missing_ok=True)
            raise
    except OSError:
        listener.close()
        raise
    return listener


def identity(path: Path) -> tuple[int, int]:
    """What tells this file from another that took its name."""
    found = path.lstat()
    return found.st_dev, found.st_ino


def remove(path: Path, of: tuple[int, int]) -> None:
    """Remove the socket, unless another has taken its name; never raises OSError."""
    try:
        if identity(path) == of:
            path.unlink()
    except OSError:
        return
