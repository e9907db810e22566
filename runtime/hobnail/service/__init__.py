"""The running robot: loop, socket, states, faults, recorder, notify."""
