"""The hazards as a table: what goes wrong, what is done to find out, and in which states that makes no sense.

A scenario takes the name of a state, does its harm to a robot in that state,
and returns what happened in words; what must not be, it raises.
"""

from __future__ import annotations

import errno
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from functools import partial

from campaign import (
    bus_hazards,
    client_hazards,
    fault_hazards,
    file_hazards,
    motion_hazards,
    start_hazards,
    stop_hazards,
)

Scenario = Callable[[str], str]


@dataclass(frozen=True, slots=True)
class Hazard:
    """One row: `not_in` says why it makes no sense in a state."""

    name: str
    meaning: str
    scenario: Scenario
    not_in: Mapping[str, str] = field(default_factory=dict)


def _states(reason: str, *states: str) -> dict[str, str]:
    return dict.fromkeys(states, reason)


NO_PULSES = _states("no pulse is sent", "off", "stopped")
NO_STEPS = _states(
    "no foot is lifted", "off", "waking", "resting", "rising", "lowering", "stopped"
) | _states("feet that are in the air come down; no foot is lifted any more", "stopping")
NO_LOAD = _states("the belly carries the robot", "off", "waking", "resting", "stopped") | _states(
    "the load is not at rest: judged with a servo model in tests/workshop/test_plant.py",
    "walking",
    "lowering",
    "stopping",
)

HAZARDS = (
    Hazard("program-killed", "servos stay driven after the program dies", start_hazards.program_killed),
    Hazard("twitch-at-start", "twitch or snap when the joints wake", start_hazards.twitch_at_start),
    Hazard(
        "commander-silent", "the commander says no more, the robot goes on", client_hazards.commander_silent
    ),
    Hazard("commander-gone", "the commander goes away, the robot goes on", client_hazards.commander_gone),
    Hazard(
        "bus-no-answer",
        "a board does not answer any more (errno 121)",
        partial(bus_hazards.gone, errno.EREMOTEIO),
    ),
    Hazard("bus-wedged", "the bus is wedged (errno 110)", partial(bus_hazards.gone, errno.ETIMEDOUT)),
    Hazard("bus-flaky", "a transfer fails now and then and ends the run", bus_hazards.flaky),
    Hazard("bus-slow", "frames take longer to send than a tick lasts", bus_hazards.slow, NO_PULSES),
    Hazard("bus-hangs", "a transfer hangs for a second", bus_hazards.hangs),
    Hazard("bus-hangs-with-oe", "a transfer hangs, /OE is wired", bus_hazards.hangs_with_a_line),
    Hazard("brown-out", "the board loses its settings as the supply sags", bus_hazards.brown_out),
    Hazard("supply-low", "the battery runs low", motion_hazards.supply_low),
    Hazard("card-stalls", "a storage card that stalls freezes the loop", file_hazards.card_stalls),
    Hazard("calibration-edited", "a calibration that is stale or wrong", file_hazards.calibration_edited),
    Hazard(
        "chip-clock-off", "the chip's clock is several per cent off", bus_hazards.uncertain_clock, NO_PULSES
    ),
    Hazard("configuration-typo", "a typo switches a protection off", file_hazards.configuration_typo),
    Hazard("yaml-surprises", "YAML reads otherwise than people", file_hazards.yaml_surprises),
    Hazard("late-ticks", "a burst of ticks after a stall", motion_hazards.late_ticks),
    Hazard("feet-lift", "it falls when feet lift", motion_hazards.feet_lift, NO_STEPS),
    Hazard("servos-overheat", "servos hold too much for too long", motion_hazards.servos_overheat),
    Hazard("restarted", "the service is restarted, over and over", start_hazards.restarted),
    Hazard("stop-released", "the stop is released, and the robot moves", stop_hazards.stop_released),
    Hazard("hung", "it hangs, but counts as running", bus_hazards.hung),
    Hazard("no-hardware", "it does not import without hardware", start_hazards.plain_machine),
    Hazard("joints-sag", "joints give under load", motion_hazards.joints_sag, NO_LOAD),
    Hazard("switched-off", "switching off jerks", stop_hazards.switched_off),
    Hazard("wall-clock-jumps", "the wall clock jumps by a day", file_hazards.wall_clock_jumps),
    Hazard(
        "no-evidence",
        "nothing is left to explain a fall",
        file_hazards.evidence,
        _states("no pulse was sent yet, so there is nothing to explain", "off"),
    ),
    Hazard("log-spam", "the log is filled with one failure", file_hazards.log_spam),
    Hazard("coarse-steps", "pulses are rounded more than once", bus_hazards.coarse, NO_PULSES),
    Hazard("every-fault", "every fault ends the run", fault_hazards.each_fault),
    Hazard("clients-run-wild", "a client floods, another never reads", client_hazards.clients_run_wild),
)
