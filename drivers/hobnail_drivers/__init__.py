"""Servo drivers of hobnail behind one contract; imports nothing of hobnail.

Nothing is re-exported here: the release helper lives in this package and has to
start fast, so that importing one module must not import the others.
"""
