"""Hazards of the I2C bus and its boards: no answer, wedged, flaky, hanging, reset; an uncertain clock."""

from __future__ import annotations

import errno
from collections.abc import Callable
from dataclasses import replace

from campaign.acts import (
    LATCHED,
    end,
    expect_fault,
    expect_stopped,
    prove_latched,
    robot_in,
    silent,
)
from campaign.world import World, brisk, demo

FOUND_S = 1.0  # within which a fault of the boards must be found (hazards: "fault within 1 s")
ADVICE = {errno.EREMOTEIO: "power", errno.ETIMEDOUT: "wedged"}


def gone(number: int, state: str) -> str:
    """Every transfer fails with that errno, and goes on failing."""
    with robot_in(state) as world:
        pulsing = world.witness.pulsing
        world.plan.fail_next(number, count=None)
        took_s = _until_told(world, "bus-error")
        if state == "stopping":
            world.until("stopped", 0.1)
        expect_stopped(world, state, "bus-error")
        said = " ".join(fault["message"] for fault in world.told()["faults"])
        assert ADVICE[number] in said, f"no advice for errno {number}: {said}"
        # What cannot be reached goes on pulsing; nothing new is sent, and it is told so.
        world.run(0.5)
        assert world.witness.pulsing == pulsing, "the pins changed though no transfer went through"
        fed = len(world.fed.times_s)
        world.run(2.0)
        if pulsing:
            assert len(world.fed.times_s) == fed, "the watchdog is fed though pulses cannot be ended"
        world.ask("reset")
        world.run(0.2)
        assert world.state == "stopped", f"{world.state} after a reset without a bus, wanted stopped"
        world.plan.clear()
        world.run(0.1)
        silent(world, 1.0)
        assert world.state == "stopped", "it resumed by itself"
        prove_latched(world)
        end(world)
        return (
            f"told after {took_s:.2f} s, stopped; {pulsing} pulses ended when the bus was back; reset works"
        )


def flaky(state: str) -> str:
    """Two transfers fail, their repeats do not."""
    with robot_in(state) as world:
        world.plan.fail_next(errno.EREMOTEIO, count=2)
        _until_told(world, "bus-retried")
        expect_fault(world, "bus-retried", cause=False)
        if state in LATCHED:
            world.loop.run(lambda: world.state == "stopped")
            prove_latched(world)
            told = "the stop goes on, and is latched"
        else:
            assert world.state != "stopped", "a repeat that went through must not stop the robot"
            told = f"warned; goes on {world.state}"
        end(world)
        return told


def hangs(state: str) -> str:
    """A transfer hangs for a second, then comes back as if nothing had been."""
    with robot_in(state) as world:
        limit_s = world.robot.safety.bus_stall_s
        world.plan.call_next(lambda: world.clock.sleep(1.0))
        took_s = _until_told(world, "bus-stalled")
        assert took_s <= limit_s + FOUND_S / 2
        if state == "stopping":
            world.until("stopped", 0.05)
        expect_stopped(world, state, "bus-stalled")
        # The socket is answered, and any stop is taken, while it hangs.
        world.ask("stop", 9, category=0)
        assert world.bus.busy_since_s is not None, "the transfer no longer hangs"
        world.run(1.0)  # it comes back in this time: the release goes before everything
        silent(world, 1.0)
        prove_latched(world)
        end(world)
        return f"told after {took_s:.2f} s, stopped; no pulse once the bus let go"


def hangs_with_a_line(state: str) -> str:
    """A transfer hangs while a stop of category 0 is asked for, and while nobody stops; /OE is wired."""
    robot = brisk(demo())
    wired = replace(
        robot, boards=tuple(replace(board, output_enable=("gpiochip0", 17)) for board in robot.boards)
    )
    told = []
    for asked in (True, False):
        with robot_in(state, wired, may_cut=True) as world:
            world.plan.call_next(world.clock.hang)
            while world.clock.wakes_s is None:  # until the next frame or read-back
                world.run(world.robot.period_s)
            began_s = world.clock.now_s
            if asked:
                world.ask("stop", 9, category=0)
            else:
                _until_told(world, "bus-stalled")
            took_s = world.clock.now_s - began_s
            assert world.clock.wakes_s is not None, "the transfer no longer hangs"
            sent = [
                pulse for chip in world.chips.values() for pulse in chip.sending_us() if pulse is not None
            ]
            assert not sent, f"{len(sent)} outputs pulse while the transfer hangs"
            told.append(f"{took_s:.2f} s after {'a stop' if asked else 'it began'}")
            silent(world, 0.5)
            world.clock.let_go()
            world.run(0.1)
            assert world.witness.all_full_off(), "the bus let go, and no release followed"
            silent(world, 0.5)
            prove_latched(world)
            end(world)
    return f"pins off {' and '.join(told)}, while it hangs; released once the bus let go"


def slow(state: str) -> str:
    """Every transfer takes longer than a tick."""
    with robot_in(state) as world:
        each_s = 1.3 * world.robot.period_s
        world.plan.call_next(lambda: world.clock.sleep(each_s), count=None)
        took_s = _until_told(world, "bus-behind")
        expect_fault(world, "bus-behind", cause=False)
        world.run(0.5)  # frames are late, but each within the limits of one tick
        if state != "stopping":
            assert world.state != "stopped", "a slow bus must not stop the robot"
        world.ask("stop", category=0)
        stopped_s, took_off_s = world.clock.now_s, 0.0
        while not world.witness.all_full_off():  # after the job under way, a read-back at worst
            world.run(world.robot.period_s)
            took_off_s = world.clock.now_s - stopped_s
            assert took_off_s < FOUND_S, "pulses go on a second after a stop"
        silent(world, 0.2)
        world.plan.clear()
        prove_latched(world)
        end(world)
        return f"told after {took_s:.2f} s; slower, within limits; pulses end {took_off_s:.2f} s after a stop"


def hung(state: str) -> str:
    """A transfer never comes back: the watchdog must not be fed any more."""
    with robot_in(state) as world:
        world.plan.call_next(world.clock.hang)
        _until_told(world, "bus-stalled")
        hung_s = world.clock.now_s
        world.run(5.0)
        late = [at_s for at_s in world.fed.times_s if at_s > hung_s]
        assert not late, f"the watchdog was fed {late[0] - hung_s:.2f} s after the stall was known"
        world.ask("state", 5)
        world.clock.let_go()
        world.run(2.0)
        assert world.fed.times_s[-1] > world.clock.now_s - 1.0, "feeding does not come back with the bus"
        expect_stopped(world, state, "bus-stalled")
        silent(world, 0.5)
        prove_latched(world)
        end(world)
        return "feeding ends, socket and ticks go on; stopped; no pulse once the bus let go"


def brown_out(state: str) -> str:
    """The board resets itself as its supply dips: its settings are those of power-up, its pulses end.

    Until the next read-back nobody knows, and the robot is commanded on.  So the
    posture it wakes at is where it was last commanded to, not where its pulses
    ended: how far that is apart is told.
    """
    with robot_in(state) as world:
        world.witness.may_cut = True  # by the chip, in this instant
        for chip in world.chips.values():
            chip.reset()
        world.witness.look()
        world.witness.may_cut = False
        commanded_us = list(world.witness.last_us)

        def note() -> None:
            for index, pulse_us in enumerate(world.machine.body.pulses_us):
                if pulse_us is not None:
                    commanded_us[index] = pulse_us

        took_s = _until_told(world, "settings-lost", note)
        assert took_s <= FOUND_S, f"found after {took_s:.2f} s"
        if state == "stopping":
            world.until("stopped", 0.05)
        expect_stopped(world, state, "settings-lost")
        silent(world, 0.5)
        ended_us = world.witness.last_us
        apart_us = max(
            abs(commanded - ended)
            for commanded, ended in zip(commanded_us, ended_us, strict=True)
            if commanded is not None and ended is not None
        ) if any(ended_us) else 0.0  # fmt: skip
        world.witness.last_us = commanded_us
        prove_latched(world)
        end(world)
        return (
            f"told after {took_s:.2f} s, stopped; set up again; woken {apart_us:.0f} us from its last pulse"
        )


def uncertain_clock(state: str) -> str:
    """The chip's oscillator is 8 % off, and so it was calibrated."""
    worst_us = 0.0
    for megahertz in (23.0, 27.0):
        robot = brisk(demo())
        boards = tuple(replace(board, oscillator_hz=megahertz * 1e6) for board in robot.boards)
        with robot_in(state, replace(robot, boards=boards)) as world:
            worst_us = max(worst_us, _worst_error_us(world, 0.3, megahertz))
            end(world)
    return f"at 23 and 27 MHz pulses are within {worst_us:.2f} us of what was asked (half a count)"


def coarse(state: str) -> str:
    """Pulses are floats until the chip's last rounding."""
    with robot_in(state) as world:
        worst_us = _worst_error_us(world, 0.5, 25.0)
        end(world)
        return f"at most {worst_us:.2f} us from what was asked (half a count)"


def _worst_error_us(world: World, seconds: float, megahertz: float) -> float:
    """The largest error of the pins' pulses against the frames handed to the bus."""
    # Data sheet, section 7.3.5: the frame is 4096 (PRE_SCALE + 1) periods of the oscillator.
    half_us = max(chip.registers[0xFE] + 1 for chip in world.chips.values()) / megahertz / 2.0
    worst_us = compared = 0.0

    def compare() -> None:
        nonlocal worst_us, compared
        world.bus.settle()
        world.witness.look()
        wanted = world.machine.body.pulses_us
        for want_us, got_us in zip(wanted, world.witness.now_us, strict=True):
            assert (want_us is None) == (got_us is None)
            if want_us is not None and got_us is not None:
                compared += 1
                worst_us = max(worst_us, abs(got_us - want_us))

    world.run(seconds, compare)
    assert compared > 100, "too few pulses to compare"
    assert worst_us <= half_us + 1e-6, f"{worst_us:.3f} us off, half a count is {half_us:.3f} us"
    return worst_us


def _until_told(world: World, fault: str, each: Callable[[], object] | None = None) -> float:
    """Run until that fault is told; how long it took."""
    began_s = world.clock.now_s
    while not world.machine.faults.is_latched(fault):
        assert world.clock.now_s - began_s < 2.0, f"no {fault} within 2 s; {world.state}"
        world.run(world.robot.period_s, each)
    return world.clock.now_s - began_s
