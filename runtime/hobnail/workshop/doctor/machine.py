"""Probes of the computer: Python, packages, scheduling, memory, processor, clock."""

from __future__ import annotations

import os
import re
import resource
import sys
from collections.abc import Iterator

from hobnail.service.realtime import FIFO_PRIORITY
from hobnail.workshop.doctor.case import Case
from hobnail.workshop.doctor.findings import Finding, fine, mend, note

OLDEST_PYTHON = (3, 11)
EARLIEST_S = 1_704_067_200.0  # 2024-01-01: an earlier time is that of a clock nobody has set
_REQUIREMENT = re.compile(r"(?P<name>[A-Za-z0-9._-]+)\s*(?:\(?>=\s*(?P<least>[0-9.]+)\)?)?")
_EXTRA = re.compile(r"""extra\s*==\s*["']([^"']+)["']""")


def python(case: Case) -> Iterator[Finding]:
    """The interpreter."""
    version = ".".join(map(str, case.world.python))
    if case.world.python < OLDEST_PYTHON:
        least = ".".join(map(str, OLDEST_PYTHON))
        yield mend("python", f"{version}, needed is {least} or newer", "install hobnail for a newer Python")
    else:
        yield fine("python", f"{version}, {sys.executable}")


def packages(case: Case) -> Iterator[Finding]:
    """What hobnail's package asks for; the hardware's libraries where real boards are driven."""
    world, needed = case.world, case.world.required()
    if not needed:
        yield note(
            "packages", "hobnail is run from its source: what it needs is not known", "`pip install .` in it"
        )
        return
    told, wrong = [f"hobnail {world.installed('hobnail')}"], []
    for line in needed:
        extra, found = _EXTRA.search(line), _REQUIREMENT.match(line)
        if found is None or (extra and not (extra[1] == "hardware" and case.is_hardware)):
            continue
        name, least = found["name"], found["least"] or ""
        have = world.installed(name)
        told.append(f"{name} {have}")
        if have is None or _numbers(have) < _numbers(least):
            wrong.append(f"{name} is {have or 'missing'}, needed {least or 'any'} or newer")
    if wrong:
        what = "hobnail[hardware]" if case.is_hardware else "hobnail"
        yield mend("packages", "; ".join(wrong), f"`pip install --upgrade '{what}'` with the Python above")
    else:
        yield fine("packages", ", ".join(told))


def _numbers(version: str) -> tuple[int, ...]:
    return tuple(int(part) for part in re.findall(r"\d+", version)[:3])


def scheduling(case: Case) -> Iterator[Finding]:
    """Real-time scheduling: as the service has it, as its unit allows it, or as this user may."""
    process = case.unit.get("MainPID", "0")
    if case.is_active and process.isdecimal() and int(process):
        try:
            policy = case.world.policy(int(process)) & ~os.SCHED_RESET_ON_FORK
        except ProcessLookupError:
            policy = None
        if policy == os.SCHED_FIFO:
            yield fine("real time", "the service runs with real-time scheduling")
        else:
            yield note(
                "real time",
                "the service runs without real-time scheduling: ticks may come late on a busy machine",
                "`--realtime` in the unit's ExecStart and LimitRTPRIO=50 allow it",
            )
        return
    if case.state is not None:
        yield note(
            "real time",
            "not known: the service manager does not say which process the service is",
            "a service started by hand says it itself, with --realtime: `hobnail log --all`"
            if _is_root(case)
            else "run this as root",
        )
        return
    allowed, who = _allowed(case, "LimitRTPRIO", resource.RLIMIT_RTPRIO)
    if allowed is None or allowed >= FIFO_PRIORITY or (not case.is_installed and _is_root(case)):
        yield fine("real time", f"{who} may use real-time scheduling")
    else:
        yield note(
            "real time",
            f"{who} may use priorities up to {allowed}, `--realtime` asks for {FIFO_PRIORITY}: ticks may "
            "come late on a busy machine",
            "run it by the unit, whose LimitRTPRIO allows it; for work at a desk it does not matter",
        )


def memory(case: Case) -> Iterator[Finding]:
    """Memory that may be locked, so that no tick waits for a page."""
    if case.state is not None and not case.is_installed:
        return  # what this user may lock says nothing of the service
    allowed, who = _allowed(case, "LimitMEMLOCK", resource.RLIMIT_MEMLOCK)
    if allowed is None or (not case.is_installed and _is_root(case)):
        yield fine("memory", f"{who} may lock all its memory")
    else:
        yield note(
            "memory",
            f"{who} may lock {allowed // 1024} kB only: a tick may wait for memory that was swapped out",
            "run it by the unit, whose LimitMEMLOCK allows it; for work at a desk it does not matter",
        )


def _allowed(case: Case, key: str, kind: int) -> tuple[int | None, str]:
    """The limit, None for no limit; and whose it is."""
    if case.is_installed and key in case.unit:
        text = case.unit[key]
        return (int(text) if text.isdecimal() else None), "the service"
    limit = case.world.limit(kind)
    return (None if limit == resource.RLIM_INFINITY else limit), "this user"


def _is_root(case: Case) -> bool:
    return case.world.find_user(None).uid == 0


def processor(case: Case) -> Iterator[Finding]:
    """The clock governor, where the kernel shows one."""
    path = case.world.path("/sys/devices/system/cpu/cpu0/cpufreq/scaling_governor")
    try:
        governor = path.read_text().strip()
    except OSError:
        return
    if governor == "powersave":
        yield note(
            "processor",
            "the clock governor is powersave: the processor may stay at its slowest",
            "if `hobnail state` shows late ticks, choose schedutil, ondemand or performance",
        )
    else:
        yield fine("processor", f"clock governor {governor}")


def clock(case: Case) -> Iterator[Finding]:
    """The wall clock: of use in logs only."""
    if case.world.wall_s() < EARLIEST_S:
        yield note(
            "clock",
            "the wall clock is before 2024: nobody has set it; the robot does not mind, its logs will",
            "let the network set it, or fit a battery-backed clock",
        )
