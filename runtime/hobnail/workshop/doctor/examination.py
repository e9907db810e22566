"""The whole examination: every probe, in the order in which one builds on another."""

from __future__ import annotations

from collections.abc import Iterator

from hobnail.workshop.doctor import machine, robot, service
from hobnail.workshop.doctor.case import Case
from hobnail.workshop.doctor.findings import LIMIT_S, Finding, Probe, examine

WEDGED = (
    "a transfer hangs: switch the boards' supply off and on, then look for a short and for missing pull-ups"
)
HUNG = "the service takes connections and does not answer: see its log, and restart it"


def probes(case: Case) -> list[Probe]:
    """All of them; what one finds out about the case, those after it use."""
    return [
        Probe("python", lambda: machine.python(case)),
        Probe("unit", lambda: service.unit(case)),
        Probe("socket", lambda: service.answer(case), HUNG),
        Probe("configuration", lambda: robot.configuration(case)),
        Probe("driver", lambda: robot.driver(case)),
        Probe("calibration", lambda: robot.calibration(case)),
        Probe("packages", lambda: machine.packages(case)),
        Probe("bus", lambda: robot.devices(case)),
        Probe("boards", lambda: robot.boards(case), WEDGED),
        Probe("lines", lambda: robot.lines(case)),
        Probe("directories", lambda: service.directories(case)),
        Probe("left over", lambda: service.leftovers(case)),
        Probe("real time", lambda: machine.scheduling(case)),
        Probe("memory", lambda: machine.memory(case)),
        Probe("processor", lambda: machine.processor(case)),
        Probe("clock", lambda: machine.clock(case)),
    ]


def findings(case: Case, *, limit_s: float = LIMIT_S) -> Iterator[Finding]:
    """What is found, as it is found."""
    return examine(probes(case), limit_s=limit_s)
