"""A robot's computer as the tests use it: the booted container with hobnail installed by the guide.

The PWM chips are a model in a file, one a unit, which outlives the service.
"""

from __future__ import annotations

import json
from collections.abc import Iterable, Iterator
from contextlib import contextmanager
from typing import Any

from hobnail_drivers.chip_file import Entry, open_chip_file
from systemd import guide
from systemd.container import Container, wait_until

USER = "gardener"  # the guide's name for whoever works with the robot
SOURCE = "/root/hobnail"  # where the copy of the repository is
UNIT = "hobnail"
UP_S = 20.0
WALK = ("hobnail", "walk", "--vx", "0.1")

# PCA9685 data sheet, Rev. 4, sec. 7.3.3 and 7.3.4: LEDn_OFF_H = 0x09 + 4 n, its bit 4 is full off.
LED0_OFF_H = 0x09
FULL_OFF = 0x10
CHANNELS = 16


def pulsing(chips: Iterable[Entry]) -> int:
    """How many channels of these chips are not full off."""
    return sum(
        not chip.registers[LED0_OFF_H + 4 * channel] & FULL_OFF
        for chip in chips
        for channel in range(CHANNELS)
    )


class Board:
    """What is running on the robot's computer, and what its PWM chips do."""

    def __init__(self, container: Container) -> None:
        self.container = container
        self.run = container.run
        self.file = container.file

    def show(self, name: str, unit: str = UNIT) -> str:
        """A property of a unit, as `systemctl show` has it."""
        return self.run(f"systemctl show --value -p {name} {unit}").stdout.strip()

    def is_active(self, unit: str = UNIT) -> bool:
        return self.show("ActiveState", unit) == "active"

    def wait_active(self, unit: str = UNIT) -> None:
        wait_until(lambda: self.is_active(unit), UP_S, f"{unit} is active: {self.journal(unit)}")

    def journal(self, unit: str = UNIT) -> str:
        """What the unit and systemd wrote about it, oldest first."""
        return self.run(f"journalctl -q -o cat -u {unit}").stdout

    def command(self, words: str, *, unit: str = UNIT, user: str = USER) -> str:
        """`hobnail WORDS` as that user; what it printed."""
        return self.run(f"hobnail {words} --socket /run/{unit}/hobnail.sock", user=user).stdout

    def state(self, unit: str = UNIT) -> dict[str, Any]:
        answer: dict[str, Any] = json.loads(self.command("state --json", unit=unit))
        return answer

    @contextmanager
    def walking(self, unit: str = UNIT) -> Iterator[None]:
        """The robot stands up and walks, at the command of another user, until the block ends."""
        self.command("stand", unit=unit)
        walker = self.container.start([*WALK, "--socket", f"/run/{unit}/hobnail.sock"], user=USER)
        try:
            wait_until(lambda: self.state(unit)["state"] == "walking", UP_S, f"{unit} walks")
            assert self.pulsing(unit) > 0
            yield
        finally:
            walker.terminate()
            walker.communicate()

    def chips(self, unit: str = UNIT) -> list[Entry]:
        """The unit's PWM chips; what is got stays readable when the container is gone."""
        return open_chip_file(str(self.file(f"/run/{unit}/chips.bin")))

    def pulsing(self, unit: str = UNIT) -> int:
        """How many channels of the unit's chips are not full off."""
        return pulsing(self.chips(unit))

    def follow(self, section: str) -> None:
        """Do what a section of the guide says, as it says it."""
        for block in guide.blocks(section):
            place = f"cd {SOURCE}\n" if block.user == "root" else ""
            self.run(place + block.script, user=block.user)

    def edit(self, path: str, old: str, new: str) -> None:
        """Replace a text in a file, which must be there."""
        text = self.file(path).read_text()
        assert old in text, f"{path} has no {old!r}"
        self.file(path).write_text(text.replace(old, new))

    def drop_in(self, lines: str, unit: str = UNIT) -> None:
        """Lines for [Service], as `systemctl edit` would add them."""
        folder = self.file(f"/etc/systemd/system/{unit}.service.d")
        folder.mkdir(exist_ok=True)
        (folder / "override.conf").write_text(f"[Service]\n{lines}\n")
        self.run("systemctl daemon-reload")
