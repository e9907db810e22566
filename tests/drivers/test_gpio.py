"""GPIO lines through the real `gpiod` package, with its one call to the kernel replaced."""

from __future__ import annotations

import sys
from datetime import timedelta
from types import SimpleNamespace
from typing import Any

import gpiod
import pytest
from gpiod.line import Bias, Direction, Value

from hobnail_drivers.contact import GpioContact, SimulatedContact
from hobnail_drivers.errors import BusError, MissingLibraryError, NotOpenError
from hobnail_drivers.gpio import GpiodOutputLine, line_user


class Request:
    """What `gpiod.request_lines` gives."""

    def __init__(self) -> None:
        self.asked: dict[str, Any] = {}
        self.levels: list[Value] = []
        self.level: Value | OSError = Value.INACTIVE
        self.released = 0

    def get_value(self, line: int) -> Value:
        assert line == 17
        if isinstance(self.level, OSError):
            raise self.level
        return self.level

    def set_value(self, line: int, value: Value) -> None:
        assert line == 17
        if isinstance(self.level, OSError):
            raise self.level
        self.levels.append(value)

    def release(self) -> None:
        self.released += 1


@pytest.fixture
def request_(monkeypatch: pytest.MonkeyPatch) -> Request:
    made = Request()

    def request_lines(path: str, **asked: Any) -> Request:
        made.asked = {"path": path, **asked}
        return made

    monkeypatch.setattr(gpiod, "request_lines", request_lines)
    return made


def test_a_contact_is_pulled_up_and_debounced_by_the_kernel(request_: Request) -> None:
    GpioContact("gpiochip0", 17, debounce_s=0.02)
    assert request_.asked["path"] == "/dev/gpiochip0"
    settings = request_.asked["config"][17]
    assert settings.direction == Direction.INPUT
    assert settings.bias == Bias.PULL_UP
    assert settings.debounce_period == timedelta(milliseconds=20)
    assert not settings.active_low


def test_low_is_closed_and_high_as_with_a_broken_wire_is_open(request_: Request) -> None:
    contact = GpioContact("/dev/gpiochip0", 17)
    assert contact.is_closed()
    request_.level = Value.ACTIVE
    assert not contact.is_closed()


def test_a_contact_that_cannot_be_read_is_an_error(request_: Request) -> None:
    contact = GpioContact("gpiochip0", 17)
    request_.level = OSError(19, "No such device")
    with pytest.raises(BusError, match="GPIO gpiochip0 line 17"):
        contact.is_closed()
    contact.close()
    contact.close()
    assert request_.released == 1
    with pytest.raises(NotOpenError):
        contact.is_closed()


def test_an_output_line_is_high_from_the_start(request_: Request) -> None:
    line = GpiodOutputLine("gpiochip0", 17)
    settings = request_.asked["config"][17]
    assert settings.direction == Direction.OUTPUT
    assert settings.output_value == Value.ACTIVE
    line.set(False)
    line.set(True)
    assert request_.levels == [Value.INACTIVE, Value.ACTIVE]
    request_.level = OSError(5, "Input/output error")
    with pytest.raises(BusError, match="GPIO gpiochip0 line 17"):
        line.set(True)
    line.close()
    assert request_.released == 1


@pytest.mark.parametrize("make", [GpioContact, GpiodOutputLine])
def test_a_missing_chip_is_told_by_name(make: type) -> None:
    with pytest.raises(BusError, match="GPIO gpiochip99 line 3: there is no such GPIO chip"):
        make("gpiochip99", 3)


@pytest.mark.parametrize("make", [GpioContact, GpiodOutputLine])
def test_a_missing_library_says_what_to_install(monkeypatch: pytest.MonkeyPatch, make: type) -> None:
    monkeypatch.setitem(sys.modules, "gpiod", None)
    with pytest.raises(MissingLibraryError, match="pip install gpiod"):
        make("gpiochip0", 3)


def test_a_simulated_contact_is_as_it_is_told() -> None:
    contact = SimulatedContact()
    assert contact.is_closed()
    contact.closed = False
    assert not contact.is_closed()


class OpenChip:
    """What `gpiod.Chip` gives: a chip whose line 4 is free, 17 is held, 5 is held by nobody's name."""

    def __init__(self, path: str) -> None:
        if path != "/dev/gpiochip0":
            raise FileNotFoundError(2, "No such file or directory")

    def __enter__(self) -> OpenChip:
        return self

    def __exit__(self, *_: object) -> None:
        pass

    def get_line_info(self, line: int) -> SimpleNamespace:
        if line > 30:
            raise ValueError("line offset out of range")
        return SimpleNamespace(used=line != 4, consumer={17: "hobnail-stop"}.get(line, ""))


def test_who_holds_a_line_is_told_without_taking_it(
    request_: Request, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(gpiod, "Chip", OpenChip)
    assert line_user("gpiochip0", 4) is None
    assert line_user("/dev/gpiochip0", 17) == "hobnail-stop"
    assert line_user("gpiochip0", 5) == "somebody without a name"
    assert request_.asked == {}
    with pytest.raises(BusError, match="no such GPIO chip"):
        line_user("gpiochip9", 4)
    with pytest.raises(BusError, match="has no such line"):
        line_user("gpiochip0", 40)
