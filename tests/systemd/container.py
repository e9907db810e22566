"""A Debian system in a folder, and a container that boots it with its own systemd; times in s.

The folder is made once by debootstrap and kept in the user's cache.  A container
boots in about a second, and dies with this process, however that ends.  Needs
root.
"""

from __future__ import annotations

import fcntl
import hashlib
import os
import shutil
import signal
import subprocess
import time
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from types import TracebackType
from typing import Self

import pytest

SUITE = "bookworm"
# What the install guide installs is here already: its apt-get finds nothing to fetch.
PACKAGES = ("systemd", "systemd-sysv", "udev", "python3", "python3-venv", "i2c-tools", "ca-certificates")
TOOLS = {
    "systemd-nspawn": "systemd-container",
    "debootstrap": "debootstrap",
    "nsenter": "util-linux",
    "setpriv": "util-linux",
    "unshare": "util-linux",
}
CERTIFICATES = Path("/etc/ssl/certs/ca-certificates.crt")
ENVIRONMENT = ("PATH=/usr/local/sbin:/usr/local/bin:/usr/sbin:/usr/bin", "LANG=C.UTF-8", "HOME=/root")
BOOT_S = 60.0
COMMAND_S = 180.0
POLL_S = 0.005


def require() -> None:
    """Skip, or in CI fail, the tests that need what this machine has not."""
    lacking = [f"package {package}" for tool, package in TOOLS.items() if shutil.which(tool) is None]
    if os.geteuid() != 0:
        lacking.insert(0, "root")
    if not lacking:
        return
    reason = f"a container cannot be booted here for want of {', '.join(dict.fromkeys(lacking))}"
    if os.environ.get("CI"):
        pytest.fail(reason)
    pytest.skip(reason)


def wait_until(condition: Callable[[], bool], within_s: float, what: str) -> float:
    """Seconds until it holds.  Here are real processes, whose clock is nobody's to set: it is asked often."""
    start_s = time.monotonic()
    while not condition():
        if time.monotonic() - start_s > within_s:
            pytest.fail(f"not within {within_s:g} s: {what}")
        time.sleep(POLL_S)
    return time.monotonic() - start_s


def cache() -> Path:
    """Where the Debian system is kept."""
    home = os.environ.get("XDG_CACHE_HOME") or Path.home() / ".cache"
    folder = Path(home) / "hobnail"
    folder.mkdir(parents=True, exist_ok=True)
    return folder


@contextmanager
def alone() -> Iterator[None]:
    """Waits for other runs of these tests: two containers at once would share control groups."""
    with (cache() / "lock").open("w") as lock:
        fcntl.flock(lock, fcntl.LOCK_EX)
        yield


def debian() -> Path:
    """The tree of a small Debian, made if it is not there yet; it is never changed."""
    key = hashlib.sha256(" ".join((SUITE, *PACKAGES)).encode()).hexdigest()[:12]
    tree = cache() / f"debian-{SUITE}-{key}"
    if tree.is_dir():
        return tree
    part = tree.with_suffix(".part")
    shutil.rmtree(part, ignore_errors=True)  # left by a run that was killed
    try:
        done = subprocess.run(
            ["debootstrap", "--variant=minbase", f"--include={','.join(PACKAGES)}", SUITE, part],
            stdout=subprocess.PIPE,
            stderr=subprocess.STDOUT,
            text=True,
            check=False,
        )
        if done.returncode:
            pytest.fail(f"debootstrap: exit code {done.returncode}\n{done.stdout[-3000:]}")
        part.rename(tree)
    finally:
        shutil.rmtree(part, ignore_errors=True)
    return tree


class Layer:
    """A tree that can be changed over one that is not: the changes are in memory, in a mount
    namespace of their own, so that they are gone with this process."""

    def __init__(self, below: Path) -> None:
        self.place = cache() / "layer"
        self.place.mkdir(exist_ok=True)
        script = (
            'mount -t tmpfs -o mode=755 hobnail "$1"; cd "$1"; mkdir upper work root; '
            'mount -t overlay -o "lowerdir=$2,upperdir=upper,workdir=work" hobnail root; '
            "echo ready; exec sleep infinity"
        )
        self._holder = subprocess.Popen(
            [
                *("setpriv", "--pdeathsig=KILL", "unshare", "--mount"),
                *("bash", "-euc", script, "bash", self.place, below),
            ],
            stdin=subprocess.DEVNULL,
            stdout=subprocess.PIPE,
            stderr=subprocess.STDOUT,
            text=True,
        )
        assert self._holder.stdout is not None
        said = self._holder.stdout.readline()
        if said != "ready\n":
            pytest.fail(f"an overlay cannot be mounted here: {said}")
        self.root = self.place / "root"
        self.entry = ["nsenter", f"--mount=/proc/{self._holder.pid}/ns/mnt"]

    def file(self, path: str) -> Path:
        """A path in the tree, seen from outside."""
        return Path(f"/proc/{self._holder.pid}/root{self.root}{path}")

    def close(self) -> None:
        """Forget the changes."""
        self._holder.kill()
        self._holder.communicate()


class Container:
    """A booted tree; `with` boots it and ends it.  `throw_away`: the tree stays as it was."""

    def __init__(self, layer: Layer, *, throw_away: bool) -> None:
        self._layer = layer
        self._throw_away = throw_away
        self._log = cache() / "boot.log"
        self._spawn: subprocess.Popen[bytes] | None = None
        self._nspawn = 0  # its process, seen from here
        self._leader = 0  # the first process inside, seen from here

    def __enter__(self) -> Self:
        try:
            self._boot()
        except BaseException:
            self._end()
            raise
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._end()

    def run(self, script: str, *, user: str = "root", check: bool = True) -> subprocess.CompletedProcess[str]:
        """Run lines of bash inside to their end; with `check`, failing the test when they fail."""
        done = subprocess.run(
            [*self._inside(user), "bash", "-euo", "pipefail", "-c", script],
            stdin=subprocess.DEVNULL,
            capture_output=True,
            text=True,
            timeout=COMMAND_S,
            check=False,
        )
        if check and done.returncode:
            pytest.fail(f"exit code {done.returncode} of:\n{script}\n{done.stdout}{done.stderr}")
        return done

    def start(self, command: Sequence[str], *, user: str) -> subprocess.Popen[str]:
        """Start a program inside that goes on; whoever starts it ends it."""
        return subprocess.Popen(
            [*self._inside(user), *command],
            stdin=subprocess.DEVNULL,
            stdout=subprocess.PIPE,
            stderr=subprocess.STDOUT,
            text=True,
        )

    def file(self, path: str) -> Path:
        """A path inside, seen from here."""
        return Path(f"/proc/{self._leader}/root{path}")

    def power_off(self) -> None:
        """As the power button does; returns when the container is down."""
        assert self._spawn is not None
        os.kill(self._nspawn, signal.SIGTERM)
        self._spawn.wait(BOOT_S)

    def _boot(self) -> None:
        options = [
            f"--directory={self._layer.root}",
            f"--machine=hobnail-{os.getpid()}",
            "--hostname=juniper",
            "--quiet",
            "--boot",
            "--register=no",
            "--settings=no",
            "--link-journal=no",
            "--console=pipe",
            "--capability=CAP_IPC_LOCK",  # to give away to the service, see the test of real-time scheduling
        ]
        if not Path("/run/systemd/system").is_dir():
            options.append("--keep-unit")  # nobody to ask for a unit of its own
        if self._throw_away:
            options.append("--volatile=overlay")
        if CERTIFICATES.is_file():
            options.append(f"--bind-ro={CERTIFICATES}")  # whom this machine trusts, for pip
        with self._log.open("wb") as log:
            # When this process dies, so does unshare, and the kernel ends all that lives in its
            # process namespace; systemd-nspawn alone would leave its container behind.
            self._spawn = subprocess.Popen(
                [
                    *("setpriv", "--pdeathsig=KILL", *self._layer.entry),
                    *("unshare", "--pid", "--mount-proc", "--fork", "--kill-child=KILL"),
                    *("systemd-nspawn", *options),
                ],
                stdin=subprocess.DEVNULL,
                stdout=log,
                stderr=subprocess.STDOUT,
            )
        wait_until(self._is_up, BOOT_S, "the container has booted")

    def _is_up(self) -> bool:
        assert self._spawn is not None
        if self._spawn.poll() is not None:
            pytest.fail(f"systemd-nspawn: exit code {self._spawn.returncode}\n{self._log.read_text()}")
        if not self._leader:
            spawns = _children(self._spawn.pid, "systemd-nspawn")
            leaders = [leader for spawn in spawns for leader in _children(spawn, "systemd")]
            if not leaders:
                return False
            (self._nspawn,), (self._leader,) = spawns, leaders
        state = self.run("systemctl is-system-running || true").stdout.strip()
        return state in ("running", "degraded")

    def _inside(self, user: str) -> list[str]:
        words = ["nsenter", f"--target={self._leader}", "--all", "--wd", "env", "-i", *ENVIRONMENT]
        # nsenter's child outlives it otherwise.
        words += ["setpriv", "--pdeathsig=TERM"]
        if user != "root":
            words += [f"--reuid={user}", f"--regid={user}", "--init-groups", "--reset-env"]
        return [*words, "--"]

    def _end(self) -> None:
        if self._spawn is not None:
            if self._leader and self._spawn.poll() is None:
                # Its first process takes all others with it, and leaves systemd-nspawn to tidy up.
                os.kill(self._leader, signal.SIGKILL)
            else:
                self._spawn.kill()
            self._spawn.wait(BOOT_S)
            self._spawn = None


def _children(pid: int, name: str) -> list[int]:
    """The children of a process that run this program."""
    try:
        children = Path(f"/proc/{pid}/task/{pid}/children").read_text().split()
        return [int(child) for child in children if Path(f"/proc/{child}/comm").read_text().strip() == name]
    except FileNotFoundError:  # gone meanwhile
        return []
