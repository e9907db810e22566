"""Servo drivers of hobnail behind one contract; imports nothing of hobnail."""

from hobnail_drivers.contract import BoardSettings, Driver, Health, Output, Pulses

__all__ = ["BoardSettings", "Driver", "Health", "Output", "Pulses"]
