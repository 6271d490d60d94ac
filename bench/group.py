"""A memory control group of the kernel: what a process holds, pages of the files it reads included, within one limit.

Files are then larger than the memory there is for them, whatever the machine has: the case that bigsvd is for.
"""

from __future__ import annotations

import os
import time
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path

ROOT = Path("/sys/fs/cgroup")
# The kernel takes a moment to see that a process has left.
PATIENCE_SECONDS = 5.0


@contextmanager
def memory_group(limit_bytes: int) -> Iterator[Path]:
    """Make a group under this limit, and remove it afterwards; a process joins by `join`.

    Raises
    ------
    OSError
        Where groups cannot be made: they want root, and a system that lets it.
    """
    first = ROOT / "memory" / f"bigsvd-bench-{os.getpid()}"
    second = ROOT / first.name
    is_first = first.parent.is_dir()
    folder = first if is_first else second
    if not is_first and "memory" not in (ROOT / "cgroup.controllers").read_text().split():
        raise OSError(f"{ROOT} offers no control of memory")
    folder.mkdir()
    try:
        (folder / ("memory.limit_in_bytes" if is_first else "memory.max")).write_text(str(limit_bytes))
        yield folder
    finally:
        _remove(folder)


def join(folder: Path) -> None:
    """Put this process, and all it starts, into a group."""
    (folder / "cgroup.procs").write_text(str(os.getpid()))


def can_group() -> bool:
    """Whether this process may make groups that limit memory."""
    with suppress(OSError), memory_group(2**30):
        return True
    return False


def _remove(folder: Path) -> None:
    """Remove a group as soon as the kernel lets go of it."""
    until = time.monotonic() + PATIENCE_SECONDS
    while True:
        try:
            folder.rmdir()
            return
        except OSError:
            if time.monotonic() > until:
                raise
            time.sleep(0.05)
