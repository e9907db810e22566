"""Hazards of starting and dying: twitches at the start, restarts, kills, missing libraries.

`program_killed` runs the service as a process of its own, on chips in a file
that outlives it, and the real release helper; the rest goes by the world's clock.
"""

from __future__ import annotations

import json
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from functools import cache
from itertools import pairwise
from pathlib import Path

from campaign.acts import PULSING, WAYS_IN, end, heed, moves, refused, robot_in, silent, still
from campaign.stepping import PATIENCE_S
from campaign.world import CONFIG, EX_CONFIG, World, demo
from command_line import subprocess_environment
from hobnail.service.client import Client
from hobnail.service.recorder import Recorder, last_posture
from hobnail_drivers.chip_file import open_chip_file
from hobnail_drivers.simulated import SimulatedDriver


def twitch_at_start(state: str) -> str:
    """The service ends in that state, its pulses are released, and it is started and woken anew."""
    robot = demo()  # with its own, unhurried wake
    with (
        tempfile.TemporaryDirectory() as directory,
        robot_in(state, robot, recorder=Recorder(Path(directory), robot)) as world,
    ):
        began = bool(world.witness.started)
        world.machine.stop(0, "the service ends", world.clock.now_s)
        silent(world, 0.1)
        world.kill_service()
        world.start_service(last_posture(Path(directory), robot))
        silent(world, 1.0)
        world.witness.started.clear()
        _wakes_one_by_one(world, from_rest=not began)
        end(world)
    where = "where they were" if began else "at rest"
    return (
        f"no pulse until asked; {len(robot.joints)} joints woken {where}, one by one, then within their steps"
    )


def _wakes_one_by_one(world: World, *, from_rest: bool) -> None:
    """`stand`: joint after joint, unhurried; a robot that lay at rest does not move before it rises."""
    safety = world.robot.safety
    world.witness.mark()
    world.ask("stand")
    world.until("resting", 20.0)
    began_s = [at_s for at_s, _ in world.witness.started]
    assert sum(len(outputs) for _, outputs in world.witness.started) == len(world.robot.joints)
    gaps_s = [b - a for a, b in pairwise(began_s)]
    assert min(gaps_s) >= safety.wake_interval_s - 1e-6, f"woken {min(gaps_s):.3f} s apart"
    if from_rest:
        assert world.witness.moved_us == 0.0, "it moved while waking, though it lay at rest"
    world.until("standing", 20.0)
    heed(world)
    still(world, 0.2)


def restarted(state: str) -> str:
    """The program dies and nobody releases; then it is started again, twice: nothing may wake."""
    with robot_in(state) as world:
        before = world.witness.pulsing
        for _ in range(2):
            known = world.machine.body.last_rad
            world.kill_service()
            world.start_service(known)
            heed(world)  # the pulses ended whole, though the set-up puts the chip to sleep
            assert world.state == "off"
            silent(world, 0.5)
            refused(world, "walk", "stand")
        world.ask("stand")
        world.until("standing", 20.0)
        still(world, 0.2)
        world.ask("walk", vx=0.1)
        moves(world, 0.4)
        end(world)
    assert exit_code_of_bad_configuration() == EX_CONFIG
    return f"{before} pulses ended whole, nothing woke; a wrong configuration exits {EX_CONFIG}: no retries"


@cache
def exit_code_of_bad_configuration() -> int:
    """What `hobnail run` exits with; that systemd does not restart on it is in tests/systemd."""
    with tempfile.TemporaryDirectory() as directory:
        config = Path(directory) / "robot.yaml"
        config.write_text((CONFIG / "juniper.yaml").read_text().replace("period_ms:", "perod_ms:"))
        done = _run("-m", "hobnail.cli.main", "run", str(config), "--socket", f"{directory}/h.sock")
        assert "perod_ms" in done.stderr, done.stderr
        assert "Traceback" not in done.stderr, done.stderr
        return done.returncode


PLAIN = """
import json, sys
sys.modules.update(dict.fromkeys(["smbus2", "gpiod", "adafruit_pca9685", "board", "busio", "mujoco"]))
from campaign import start_hazards
print(json.dumps(start_hazards.plain_life()))
"""


def plain_machine(state: str) -> str:
    """On a machine without any hardware library, on simulated servos."""
    reached = _plain_states()
    assert state in reached, f"not reached without hardware libraries; reached: {', '.join(reached)}"
    return "reached on simulated servos with every hardware library missing"


@cache
def _plain_states() -> list[str]:
    done = _run("-c", PLAIN)
    assert done.returncode == 0, done.stderr[-500:]
    reached: list[str] = json.loads(done.stdout)
    return reached


def plain_life() -> list[str]:
    """The states that can be reached; for the process without libraries."""
    reached = []
    for state in WAYS_IN:
        with robot_in(state, driver=SimulatedDriver) as world:
            reached.append(world.state)
    return reached


def _run(*words: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, *words],
        env=subprocess_environment(),
        capture_output=True,
        text=True,
        check=False,
        timeout=10 * PATIENCE_S,
    )


# ---- a process of its own

SERVICE = """
import sys
from pathlib import Path
from campaign.world import brisk, demo
from hobnail.service.serve import run
directory = Path(sys.argv[1])
sys.exit(run(brisk(demo()), driver=f"chip-model:{directory}/chips", socket_path=directory / "h.sock"))
"""
ASKS = {"waking": "stand", "resting": "rest", "rising": "stand"}  # what leads there from off


def program_killed(state: str) -> str:
    """SIGKILL in that state; then the release helper, as the service manager runs it."""
    with tempfile.TemporaryDirectory() as name:
        directory = Path(name)
        service = _start(directory)
        try:
            with Client(directory / "h.sock", timeout_s=PATIENCE_S) as client:
                _lead(client, state)
                # The state is told at once; pulses follow it within the next transfer.
                _until(lambda: (_pulses(directory) > 0) == (state in PULSING), "pulses as they should be")
                service.kill()
                service.wait(PATIENCE_S)
            left = _pulses(directory)
            assert (left > 0) == (state in PULSING), f"{left} channels on after SIGKILL in {state}"
            began_s = time.monotonic()
            done = subprocess.run(
                [sys.executable, "-m", "hobnail_drivers.release"],
                env=subprocess_environment(HOBNAIL_SOCKET=str(directory / "h.sock")),
                capture_output=True,
                text=True,
                check=False,
                timeout=PATIENCE_S,
            )
            took_s = time.monotonic() - began_s
            assert done.returncode == 0, done.stderr
            assert _pulses(directory) == 0, f"{_pulses(directory)} channels on after hobnail-release"
            service = _start(directory)
            with Client(directory / "h.sock", timeout_s=PATIENCE_S) as client:
                assert client.state()["state"] == "off"
                assert _pulses(directory) == 0, "a restart wakes nothing"
        finally:
            service.kill()
            service.wait(PATIENCE_S)
    return f"{left} channels on; hobnail-release ends them within {took_s * 1e3:.0f} ms; a restart is off"


def _start(directory: Path) -> subprocess.Popen[bytes]:
    service = subprocess.Popen(
        [sys.executable, "-c", SERVICE, str(directory)],
        env=subprocess_environment(),
        stderr=subprocess.DEVNULL,
    )

    def answers() -> bool:
        assert service.poll() is None, "the service ended by itself"
        try:
            Client(directory / "h.sock").close()
        except OSError:
            return False
        return True

    _until(answers, "the service comes up")
    return service


def _lead(client: Client, state: str) -> None:
    """By requests over the socket, in real time."""
    if state == "off":
        return
    client.call(ASKS.get(state, "stand"))
    if state not in ASKS:
        _wait(client, "standing")
    if state in ("walking", "stopping", "stopped"):
        client.walk(0.15, 0.0, 0.0, ttl_s=10.0)
        _wait(client, "walking")
    if state == "stopping":
        client.stop(1)
    elif state == "stopped":
        client.stop(0)
    elif state == "lowering":
        client.rest()
    _wait(client, state)


def _wait(client: Client, state: str) -> None:
    _until(lambda: client.state()["state"] == state, state)


def _until(reached: Callable[[], bool], what: str) -> None:
    bound_s = time.monotonic() + PATIENCE_S
    while not reached():
        assert time.monotonic() < bound_s, f"in vain: {what}"
        time.sleep(0.005)


def _pulses(directory: Path) -> int:
    """How many channels are not full off (data sheet, sec. 7.3.3: LEDn_OFF_H bit 4)."""
    return sum(
        not entry.registers[0x09 + 4 * channel] & 0x10
        for entry in open_chip_file(str(directory / "chips"))
        for channel in range(16)
    )
