"""What the system can do for punctual ticks: scheduling, locked memory, a quiet collector.

Each is asked for, and what is refused is told in words: the loop works without.
"""

from __future__ import annotations

import gc
import os
import resource
import sys
import threading

from hobnail.service.bus import BUS_THREAD

FIFO_PRIORITY = 40  # above every ordinary process, below the kernel's interrupt threads at 50
SWITCH_S = 0.0005  # how long another thread may compute before the loop gets its turn
USUAL_SWITCH_S = 0.005  # Python's own
# mlockall(2).  ONFAULT: only what is used is locked, not stacks and buffers at their full size.
_MCL_CURRENT, _MCL_FUTURE, _MCL_ONFAULT = 1, 2, 4


def quiet_collector() -> None:
    """Freeze what is there and collect only when the loop says so."""
    sys.setswitchinterval(SWITCH_S)
    gc.collect()
    gc.freeze()
    gc.disable()


def usual_collector() -> None:
    """Undo `quiet_collector`."""
    sys.setswitchinterval(USUAL_SWITCH_S)
    gc.enable()
    gc.unfreeze()


def go_realtime() -> list[str]:
    """Real-time scheduling for the threads there are, and locked memory; what came of it, in words.

    Every thread takes part, the slow ones one step below this one and the bus
    thread: an ordinary thread that is put aside while it holds the interpreter
    would hold up the loop.
    """
    told = []
    swift = (threading.current_thread().name, BUS_THREAD)
    try:
        for thread in threading.enumerate():
            priority = FIFO_PRIORITY if thread.name in swift else FIFO_PRIORITY - 1
            # Processes started from here, if there were any, must not inherit it.
            os.sched_setscheduler(
                thread.native_id or 0, os.SCHED_FIFO | os.SCHED_RESET_ON_FORK, os.sched_param(priority)
            )
        told.append(f"real-time scheduling: on, SCHED_FIFO {FIFO_PRIORITY}")
    except OSError as error:
        told.append(f"real-time scheduling: off, {error.strerror}; LimitRTPRIO in the unit allows it")
    import ctypes  # needed only here, and slow to load

    # To lock what is yet to come as well would make an allocation fail where locking is limited.
    unlimited = resource.getrlimit(resource.RLIMIT_MEMLOCK)[0] == resource.RLIM_INFINITY
    libc = ctypes.CDLL(None, use_errno=True)
    flags = _MCL_CURRENT | _MCL_FUTURE | _MCL_ONFAULT if unlimited else _MCL_CURRENT | _MCL_ONFAULT
    if libc.mlockall(flags) == 0:
        told.append("memory: locked" if unlimited else "memory: what is there now is locked")
    else:
        told.append(
            f"memory: not locked, {os.strerror(ctypes.get_errno())}; LimitMEMLOCK in the unit allows it"
        )
    return told
