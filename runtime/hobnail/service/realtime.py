"""What the system can do for punctual ticks: scheduling, locked memory, a quiet collector.

Each is asked for, and what is refused is told in words: the loop works without.
"""

from __future__ import annotations

import gc
import os
import sys

FIFO_PRIORITY = 50  # above every ordinary process, below the kernel's own interrupt threads' usual 50 at most
SWITCH_S = 0.0005  # how long another thread may compute before the loop gets its turn
_MCL_CURRENT, _MCL_FUTURE = 1, 2


def quiet_collector() -> None:
    """Freeze what is there and collect only when the loop says so."""
    sys.setswitchinterval(SWITCH_S)
    gc.collect()
    gc.freeze()
    gc.disable()


def usual_collector() -> None:
    """Undo `quiet_collector`."""
    gc.enable()
    gc.unfreeze()


def go_realtime() -> list[str]:
    """Take real-time scheduling for this thread and lock memory; what came of it, in words."""
    told = []
    try:
        # Children, if there were any, must not inherit it.
        os.sched_setscheduler(0, os.SCHED_FIFO | os.SCHED_RESET_ON_FORK, os.sched_param(FIFO_PRIORITY))
        told.append(f"real-time scheduling: on, SCHED_FIFO {FIFO_PRIORITY}")
    except OSError as error:
        told.append(f"real-time scheduling: off, {error.strerror}; LimitRTPRIO in the unit allows it")
    import ctypes  # needed only here, and slow to load

    libc = ctypes.CDLL(None, use_errno=True)
    if libc.mlockall(_MCL_CURRENT | _MCL_FUTURE) == 0:
        told.append("memory: locked")
    else:
        told.append(
            f"memory: not locked, {os.strerror(ctypes.get_errno())}; LimitMEMLOCK in the unit allows it"
        )
    return told
