"""Hazards of stopping: a stop that is taken back, pulses that are switched off."""

from __future__ import annotations

from contextlib import suppress
from dataclasses import replace

from campaign.acts import (
    LATCHED,
    PULSING,
    end,
    expect_stopped,
    heed,
    prove_latched,
    refused,
    robot_in,
    silent,
)
from campaign.world import brisk, demo
from hobnail.errors import HobnailError
from hobnail.robot import Robot, StopInput
from hobnail.service.power import StopInputWatch
from hobnail_drivers.contact import SimulatedContact

SHORT_S = 0.4


def stop_released(state: str) -> str:
    """Stops of each category, from a client and from the contact, are given and taken back."""
    short = brisk(demo(), crouch_s=SHORT_S)  # too short to be down in time: cut all the same
    told = [
        _stopped_by_client(state, category, robot) for category, robot in ((0, None), (1, None), (1, short))
    ]
    told.append(_stopped_by_contact(state))
    return f"{'; '.join(told)}; latched until reset, wake and command, each time"


def _stopped_by_client(state: str, category: int, robot: Robot | None) -> str:
    with robot_in(state, robot) as world:
        period_s, crouch_s = world.robot.period_s, world.robot.safety.crouch_s

        def hold() -> None:
            """A stick that is held down through all of it, every tick."""
            with suppress(HobnailError):
                world.machine.request("walk", {"vx": 0.1, "vy": 0.0}, 7, world.clock.now_s)

        began_s = world.clock.now_s
        world.ask("stop", 9, category=category, reason="somebody shouted")
        if category == 0:
            world.run(period_s, hold)
            assert world.witness.all_full_off(), "category 0 has to end the pulses at once"
        world.loop.run(lambda: world.state == "stopped" or world.clock.now_s - began_s > crouch_s + period_s)
        took_s = world.clock.now_s - began_s
        assert world.state == "stopped", f"{world.state} after {took_s:.2f} s, allowed {crouch_s:g} s"
        silent(world, 0.1)
        expect = "the way in" if state in LATCHED else "somebody shouted"
        assert expect in str(world.told()["first_cause"]), world.told()["first_cause"]
        # The stick is held through reset and wake: that is no fresh command.
        world.run(0.3, hold)
        world.ask("reset", 9)
        world.run(0.3, hold)
        silent(world, 0.2)
        world.ask("stand", 9)
        world.run(0.1, hold)
        while world.state != "standing":
            world.run(period_s, hold)
        still_before_us = world.witness.moved_us
        world.run(0.3, hold)
        assert world.witness.moved_us == still_before_us, "a stick held down since before the stop moved it"
        end(world)
        return f"category {category} after {took_s:.2f} s"


def _stopped_by_contact(state: str) -> str:
    contact = SimulatedContact()
    settings = StopInput(chip="gpiochip0", line=4, debounce_s=0.02)
    with robot_in(state, stop_input=StopInputWatch(settings, contact.is_closed)) as world:
        contact.closed = False
        world.run(0.05)
        began_s = world.clock.now_s
        world.loop.run(lambda: world.state == "stopped" or world.clock.now_s - began_s > 2.0)
        expect_stopped(world, state, "stop-input")
        refused(world, "reset", "switch")
        contact.closed = True
        silent(world, 1.0)
        assert world.state == "stopped", "the contact closed again, and the stop was gone"
        prove_latched(world)
        end(world)
        return "contact"


def switched_off(state: str) -> str:
    """Pulses end on request and by category 0, with and without /OE wired: no servo jerks."""
    robot = brisk(demo())
    wired = replace(
        robot, boards=tuple(replace(board, output_enable=("gpiochip0", 17)) for board in robot.boards)
    )
    for each in (robot, wired):
        with robot_in(state, each, may_cut=state in LATCHED and each is wired) as world:
            if state in LATCHED:
                refused(world, "off", "reset")
                world.loop.run(lambda: world.state == "stopped")
            else:
                world.ask("off")
                world.until("off", 20.0)
            heed(world)  # no pulse was cut
            silent(world, 0.1)
            assert world.witness.all_full_off(), "full off it has to be, on every channel"
            end(world)
    with robot_in(state) as world:
        world.ask("stop", category=0)
        world.run(world.robot.period_s)
        heed(world)
        silent(world, 0.1)
        assert world.witness.all_full_off(), "full off it has to be, on every channel"
        end(world)
    # The line cuts at once: that is what it is for.
    with robot_in(state, wired, may_cut=True) as world:
        world.ask("stop", category=0)
        assert all(pulse is None for chip in world.chips.values() for pulse in chip.sending_us())
        silent(world, 0.1)
        prove_latched(world)
        end(world)
    return "no pulse cut by a request or by full off; /OE cuts at once" if state in PULSING else "stays off"
