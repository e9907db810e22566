"""Hardware libraries, imported only when a device is opened; says what to install when one is missing."""

from __future__ import annotations

import sys
from importlib import import_module
from types import ModuleType
from typing import Any

from hobnail_drivers.errors import MissingLibraryError


def load(module: str, distribution: str) -> Any:
    """Import `module`.  Raises MissingLibraryError naming the `distribution` to install."""
    try:
        return import_module(module)
    except ImportError as error:
        raise MissingLibraryError(
            f"Python library {distribution} is needed for this device and cannot be imported ({error}): "
            f"run `pip install 'hobnail[hardware]'` or `pip install {distribution}`"
        ) from error


def load_pwm_chip() -> Any:
    """Import `adafruit_pca9685` without the detection of a board that its imports would start.

    The library imports `busio` and `digitalio` for the names in its annotations
    only; the real ones probe the machine and load its GPIO back end.  Stand-ins
    take their place during the import, and are gone after it.
    """
    stand_ins = {}
    for name, classes in (("busio", ("I2C", "SPI")), ("digitalio", ("DigitalInOut",))):
        if name not in sys.modules:
            stand_in = ModuleType(name)
            for class_name in classes:
                setattr(stand_in, class_name, object)
            stand_ins[name] = stand_in
    sys.modules.update(stand_ins)
    try:
        return load("adafruit_pca9685", "adafruit-circuitpython-pca9685")
    finally:
        for name in stand_ins:
            del sys.modules[name]
