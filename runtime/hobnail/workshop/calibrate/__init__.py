"""Guided calibration on the bench: the session, what it asks of bench and technician, and its record."""
