"""The page cache: bring a file in, put it out, and say how much of it is there."""

from __future__ import annotations

import ctypes
import mmap
import os
from pathlib import Path

import numpy as np

PIECE = 1 << 24


def stored_files(path: Path) -> list[Path]:
    """The file, or all files of a folder."""
    return [path] if path.is_file() else sorted(part for part in path.rglob("*") if part.is_file())


def warm(path: Path) -> int:
    """Read every stored byte once, so that all candidates find the file in the page cache; return how many."""
    total = 0
    buffer = bytearray(PIECE)
    for part in stored_files(path):
        with open(part, "rb", buffering=0) as file:
            while count := file.readinto(buffer):
                total += count
    return total


def drop(path: Path) -> None:
    """Ask the kernel to forget the pages of a file; written pages go to the disk first."""
    for part in stored_files(path):
        handle = os.open(part, os.O_RDONLY)
        try:
            os.fsync(handle)
            os.posix_fadvise(handle, 0, 0, os.POSIX_FADV_DONTNEED)
        finally:
            os.close(handle)


def cached_share(path: Path) -> float:
    """Share of the stored bytes that is in the page cache, by mincore(2)."""
    library = ctypes.CDLL(None, use_errno=True)
    library.mincore.argtypes = (ctypes.c_void_p, ctypes.c_size_t, ctypes.c_void_p)
    there = total = 0
    for part in stored_files(path):
        size = part.stat().st_size
        if not size:
            continue
        total += -(-size // mmap.PAGESIZE)
        with open(part, "rb") as file, mmap.mmap(file.fileno(), size, access=mmap.ACCESS_READ) as mapped:
            start = np.frombuffer(mapped, np.uint8)
            pages = np.zeros(-(-size // mmap.PAGESIZE), np.uint8)
            if library.mincore(start.ctypes.data, size, pages.ctypes.data):
                raise OSError(ctypes.get_errno(), "mincore failed")
            there += int(np.count_nonzero(pages & 1))
            # The array holds on to the mapping, which could not be closed.
            del start
    return there / max(1, total)
