"""What this machine allows and what the process holds: memory limits, resident size, processors, the allocator."""

from __future__ import annotations

import contextlib
import importlib.metadata
import os
from pathlib import Path

_STEP = 256 * 2**20
_MALLOC_TRIM, _MALLOC_MMAP = -1, -3


def package_version(name: str) -> str:
    """Version of an installed package; ``unknown`` where there is none."""
    try:
        return importlib.metadata.version(name)
    except importlib.metadata.PackageNotFoundError:
        return "unknown"


def default_ceiling() -> int:
    """Half of the least of physical memory, control-group limit and address-space limit, rounded down to 256 MiB.

    A fixed figure of the machine, not what happens to be free, so that the same command makes the same plan.
    """
    return max(_STEP, memory_limit() // 2 // _STEP * _STEP)


def memory_limit() -> int:
    """The most this process could ever hold, bytes."""
    import psutil

    limits = [int(psutil.virtual_memory().total), *_group_limits()]
    try:
        import resource

        soft, _ = resource.getrlimit(resource.RLIMIT_AS)
        if soft != resource.RLIM_INFINITY:
            limits.append(soft)
    except ImportError:
        # Not a Unix: there is no such limit.
        pass
    return min(limits)


def _group_limits(system: Path = Path("/")) -> list[int]:
    """Limits of the control groups this process is in and of all above them, both versions, where they are visible."""
    try:
        entries = (system / "proc/self/cgroup").read_text().splitlines()
    except OSError:
        entries = []
    groups = system / "sys/fs/cgroup"
    files = {groups / "memory.max", groups / "memory/memory.limit_in_bytes"}
    for entry in entries:
        _, controllers, group = entry.split(":", 2)
        own = Path(group.lstrip("/"))
        if not controllers:
            files |= {groups / part / "memory.max" for part in (own, *own.parents)}
        elif "memory" in controllers.split(","):
            files |= {groups / "memory" / part / "memory.limit_in_bytes" for part in (own, *own.parents)}
    limits = []
    for file in files:
        with contextlib.suppress(OSError):
            text = file.read_text().strip()
            if text.isdigit():
                limits.append(int(text))
    return limits


def available_bytes() -> int:
    """Memory that is free or can be freed at once, bytes."""
    import psutil

    return int(psutil.virtual_memory().available)


def processors() -> int:
    """Processors this process may use."""
    try:
        return len(os.sched_getaffinity(0))
    except AttributeError:
        return os.cpu_count() or 1


def resident_bytes() -> int:
    """Resident size of the process now."""
    import psutil

    return int(psutil.Process().memory_info().rss)


def reset_peak() -> None:
    """Begin the record of the peak anew, where the system can (Linux)."""
    # Elsewhere, and in some containers, the record goes back to the start of the process: an upper bound.
    with contextlib.suppress(OSError):
        Path("/proc/self/clear_refs").write_text("5")


def peak_resident_bytes() -> int:
    """Largest resident size since `reset_peak`, by the operating system's own record."""
    try:
        for line in Path("/proc/self/status").read_text().splitlines():
            if line.startswith("VmHWM:"):
                return int(line.split()[1]) * 1024
    except OSError:
        pass
    import resource
    import sys

    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return int(peak) if sys.platform == "darwin" else int(peak) * 1024


def tune_allocator() -> None:
    """Make glibc hand large blocks back at once.

    Its threshold otherwise grows to 32 MiB with use, and freed buffers stay in the heap, beyond any plan. Below the
    threshold blocks are used again without the kernel clearing their pages anew.
    """
    import ctypes

    try:
        library = ctypes.CDLL(None)
        library.mallopt(_MALLOC_MMAP, 4 * 2**20)
        library.mallopt(_MALLOC_TRIM, 16 * 2**20)
    except (OSError, AttributeError, TypeError):
        # Another C library: nothing to tune.
        return
