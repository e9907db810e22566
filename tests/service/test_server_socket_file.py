"""Where the socket is and who may open it: rights, stale and living sockets, clear refusals."""

from __future__ import annotations

import fcntl
import grp
import os
import socket
import stat
from pathlib import Path

import pytest

from hobnail.errors import EX_NOPERM, ServiceError
from hobnail.service import socket_file
from hobnail.service.socket_file import answers, default_path, identity, kept_free, listen, remove


def _connects(path: Path) -> bool:
    with socket.socket(socket.AF_UNIX, socket.SOCK_STREAM) as client:
        return client.connect_ex(str(path)) == 0


def test_the_socket_is_for_user_and_group_and_its_directory_is_made(tmp_path: Path) -> None:
    path = tmp_path / "new" / "deep" / "h.sock"
    with listen(path):
        assert stat.filemode(path.stat().st_mode) == "srw-rw----"
        assert stat.filemode(path.parent.stat().st_mode) == "drwx------"
        assert [entry.name for entry in path.parent.iterdir()] == ["h.sock"]
        assert _connects(path)


def test_the_group_is_set_on_socket_and_new_directory(tmp_path: Path) -> None:
    others = [group for group in os.getgroups() if group != os.getgid()] or [os.getgid()]
    if os.geteuid() == 0:
        others = [grp.getgrnam("daemon").gr_gid]
    path = tmp_path / "run" / "h.sock"
    with listen(path, group=grp.getgrgid(others[0]).gr_name):
        assert path.stat().st_gid == others[0]
        assert path.parent.stat().st_gid == others[0]
        assert stat.filemode(path.parent.stat().st_mode) == "drwxr-x---"


def test_an_unknown_group_is_named(tmp_path: Path) -> None:
    with pytest.raises(ServiceError, match="no group nonesuch on this machine: make it with `groupadd"):
        listen(tmp_path / "h.sock", group="nonesuch")


def test_a_stale_socket_is_replaced(tmp_path: Path) -> None:
    path = tmp_path / "h.sock"
    listen(path).close()
    assert path.exists()
    assert not _connects(path)
    with listen(path):
        assert _connects(path)


def test_a_living_service_is_not_replaced(tmp_path: Path) -> None:
    path = tmp_path / "h.sock"
    with listen(path):
        with pytest.raises(ServiceError, match=r"already answers on .*h\.sock: stop it first"):
            listen(path)
        assert _connects(path)


def test_a_service_that_hangs_with_a_full_backlog_counts_as_living(tmp_path: Path) -> None:
    path = tmp_path / "h.sock"
    clients = []
    with listen(path):
        while True:
            client = socket.socket(socket.AF_UNIX, socket.SOCK_STREAM)
            client.setblocking(False)
            clients.append(client)
            if client.connect_ex(str(path)) != 0:
                break
        with pytest.raises(ServiceError, match="already answers"):
            listen(path)
    for client in clients:
        client.close()


@pytest.mark.parametrize("kind", ["file", "directory", "link"])
def test_what_is_no_socket_is_left_alone(tmp_path: Path, kind: str) -> None:
    path = tmp_path / "h.sock"
    if kind == "file":
        path.write_text("precious")
    elif kind == "directory":
        path.mkdir()
    else:
        path.symlink_to(tmp_path / "elsewhere")
    before = path.lstat().st_ino
    with pytest.raises(ServiceError, match="is no socket: remove it"):
        listen(path)
    assert path.lstat().st_ino == before
    assert [entry.name for entry in tmp_path.iterdir()] == ["h.sock"]


def test_a_path_that_the_kernel_cannot_take_is_refused(tmp_path: Path) -> None:
    with pytest.raises(ServiceError, match="150 bytes long; allowed: about 107"):
        listen(Path("/tmp") / ("x" * 145))
    (tmp_path / "file").write_text("")
    with pytest.raises(ServiceError, match="is no directory"):
        listen(tmp_path / "file" / "h.sock")


def test_a_directory_that_anybody_may_write_to_is_refused_unless_sticky(tmp_path: Path) -> None:
    loose = tmp_path / "loose"
    loose.mkdir()
    loose.chmod(0o777)
    with pytest.raises(ServiceError, match="can be changed by other users"):
        listen(loose / "h.sock")
    loose.chmod(0o1777)
    listen(loose / "h.sock").close()


def test_two_services_that_start_at_once_do_not_both_win(tmp_path: Path) -> None:
    lock = os.open(tmp_path, os.O_RDONLY)
    fcntl.flock(lock, fcntl.LOCK_EX)
    with pytest.raises(ServiceError, match="another program is starting or calibrating"):
        listen(tmp_path / "h.sock")
    os.close(lock)
    listen(tmp_path / "h.sock").close()


def test_a_failure_in_between_leaves_nothing_behind(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def refuse(*_: object) -> None:
        raise PermissionError(1, "Operation not permitted")

    monkeypatch.setattr(os, "chown", refuse)
    monkeypatch.setattr(socket_file, "_own_groups", set)
    with pytest.raises(ServiceError, match="not in the group daemon: add it") as caught:
        listen(tmp_path / "h.sock", group="daemon")
    assert caught.value.exit_code == EX_NOPERM
    assert list(tmp_path.iterdir()) == []


def test_a_directory_without_permission_is_told(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def refuse(*_: object, **__: object) -> None:
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr(Path, "mkdir", refuse)
    with pytest.raises(ServiceError, match=r"Permission denied\. Choose a place") as caught:
        listen(tmp_path / "h.sock")
    assert caught.value.exit_code == EX_NOPERM


def test_only_the_own_socket_is_removed(tmp_path: Path) -> None:
    path = tmp_path / "h.sock"
    listener = listen(path)
    mine = identity(path)
    listener.close()
    with listen(path):
        remove(path, mine)
        assert _connects(path)
        remove(path, identity(path))
    assert not path.exists()
    remove(path, mine)


def test_where_the_socket_is_when_nobody_says(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    monkeypatch.setattr(socket_file, "SYSTEM_PATH", tmp_path / "hobnail.sock")
    everything = {
        "HOBNAIL_SOCKET": "/a/b",
        "RUNTIME_DIRECTORY": "/run/x:/run/y",
        "XDG_RUNTIME_DIR": "/run/user/1",
    }
    assert default_path(everything) == Path("/a/b")
    del everything["HOBNAIL_SOCKET"]
    assert default_path(everything) == Path("/run/x/hobnail.sock")
    del everything["RUNTIME_DIRECTORY"]
    assert default_path(everything) == Path("/run/user/1/hobnail.sock")
    (tmp_path / "hobnail.sock").touch()
    assert default_path(everything) == tmp_path / "hobnail.sock"
    (tmp_path / "hobnail.sock").unlink()
    assert default_path({"HOBNAIL_SOCKET": ""}) == Path(f"/tmp/hobnail-{os.getuid()}/hobnail.sock")


def test_kept_free_no_service_starts_there_and_afterwards_one_does(tmp_path: Path) -> None:
    path = tmp_path / "run" / "h.sock"
    with kept_free(path):
        with pytest.raises(ServiceError, match="starting or calibrating"):
            listen(path)
        with pytest.raises(ServiceError, match="starting or calibrating"), kept_free(path):
            pass
    with listen(path), pytest.raises(ServiceError, match="two programs must not"), kept_free(path):
        pass
    assert not answers(path)  # what is left of a service that has gone does not count
    with kept_free(path):
        pass


def test_a_system_directory_that_is_closed_to_this_user_is_where_the_socket_is(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    """So that whoever opens it there is told which group may."""

    class Closed(type(Path())):  # type: ignore[misc]
        def exists(self) -> bool:
            raise PermissionError(13, "Permission denied", str(self))

    monkeypatch.setattr(socket_file, "SYSTEM_PATH", Closed("/run/hobnail/hobnail.sock"))
    assert default_path({}) == Path("/run/hobnail/hobnail.sock")
