"""What keeps a machine from working, each with the next thing to do.

    findings  grades, findings, and how probes are run: each by itself, each within its time
    world     what probes see of the machine, so that tests can show them another one
    case      what one probe finds out and later ones need
    machine   Python, packages, scheduling, memory, processor, clock
    robot     configuration, calibration, driver, boards, lines
    service   unit, socket, faults, directories, leftovers

Nothing here moves anything, and nothing is written anywhere.
"""
