"""Offline tools for the bench: check, rehearse, calibrate, trim, log."""
