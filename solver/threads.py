"""How many threads the array operations may use."""

from __future__ import annotations

import os


def thread_count() -> int:
    """Threads allowed: ``OMP_NUM_THREADS`` or ``OPENBLAS_NUM_THREADS`` where set, else the usable cores; at most 8."""
    for name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS"):
        value = os.environ.get(name, "")
        if value.isdigit() and int(value) > 0:
            return min(int(value), 8)
    usable = len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1
    return min(usable, 8)
