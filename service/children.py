"""Child processes that never outlive their parent, and import no more than they need."""

from __future__ import annotations

import ctypes
import os
import signal
import sys
from multiprocessing.process import BaseProcess

PR_SET_PDEATHSIG = 1  # linux/prctl.h


def start_lean(process: BaseProcess) -> None:
    """Start a spawned process without its importing the command that started us: the web and the plots stay out of it."""
    main = sys.modules["__main__"]
    hidden = {name: main.__dict__.pop(name, None) for name in ("__file__", "__spec__")}
    main.__spec__ = None
    try:
        process.start()
    finally:
        main.__dict__.update({name: value for name, value in hidden.items() if value is not None})


def die_with_parent() -> None:
    """Ask the kernel to kill this process when its parent dies; leave at once if that has happened already."""
    parent = os.getppid()
    ctypes.CDLL(None, use_errno=True).prctl(PR_SET_PDEATHSIG, signal.SIGKILL)
    if os.getppid() != parent or parent == 1:
        os._exit(1)
    signal.signal(signal.SIGINT, signal.SIG_IGN)  # Ctrl-C is the parent's; it ends its children in order


def ask_for_priority(priority: int) -> str:
    """Ask for real-time scheduling, so that a busy machine does not delay the loop; says what came of it."""
    try:
        os.sched_setscheduler(0, os.SCHED_FIFO, os.sched_param(priority))
    except OSError:
        return "normal (SCHED_FIFO was not granted: expect more jitter on a busy machine)"
    return f"SCHED_FIFO {priority}"
