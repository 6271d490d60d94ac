"""The files of a store, in a folder or in memory, behind one interface."""

from __future__ import annotations

import hashlib
import os
from collections.abc import Iterator
from pathlib import Path
from typing import TYPE_CHECKING, Any, Protocol

if TYPE_CHECKING:
    from zarr.abc.store import Store

_PIECE = 2**20


class StoreFiles(Protocol):
    """Files by their relative name, slashes between folders."""

    def names(self) -> list[str]:
        """All names, sorted."""
        ...

    def size(self, name: str) -> int | None:
        """Bytes of a file, None where there is none."""
        ...

    def pieces(self, name: str) -> Iterator[bytes]:
        """Read a file in pieces of 1 MiB."""
        ...

    def append(self, name: str, data: bytes) -> None:
        """Write at the end of a file, which is made if it does not exist."""
        ...

    def replace(self, name: str, data: bytes) -> None:
        """Write a whole file."""
        ...

    def settle(self, name: str | None = None) -> None:
        """Return when one file, or all that was written, is on the device."""
        ...

    def store(self, *, read_only: bool) -> Store:
        """Open the same files as a Zarr store."""
        ...


class FolderFiles:
    """Files below one folder."""

    def __init__(self, path: Path) -> None:
        self.path = path

    def names(self) -> list[str]:
        """All names, sorted."""
        found = [Path(folder, name) for folder, _, names in os.walk(self.path) for name in names]
        return sorted(path.relative_to(self.path).as_posix() for path in found)

    def size(self, name: str) -> int | None:
        """Bytes of a file, None where there is none."""
        path = self.path / name
        return path.stat().st_size if path.is_file() else None

    def pieces(self, name: str) -> Iterator[bytes]:
        """Read a file in pieces of 1 MiB."""
        with open(self.path / name, "rb") as file:
            while piece := file.read(_PIECE):
                yield piece

    def append(self, name: str, data: bytes) -> None:
        """Write at the end of a file, which is made if it does not exist."""
        with open(self.path / name, "ab") as file:
            file.write(data)

    def replace(self, name: str, data: bytes) -> None:
        """Write a whole file."""
        with open(self.path / name, "wb") as file:
            file.write(data)

    def settle(self, name: str | None = None) -> None:
        """Flush to the device, with the folders, and drop the pages, so that reading back reads the device."""
        for each in self.names() if name is None else [name]:
            with open(self.path / each, "rb") as file:
                os.fsync(file.fileno())
                if hasattr(os, "posix_fadvise"):
                    os.posix_fadvise(file.fileno(), 0, 0, os.POSIX_FADV_DONTNEED)
        for folder in [path for path, _, _ in os.walk(self.path)] if name is None else [(self.path / name).parent]:
            sync_folder(Path(folder))

    def store(self, *, read_only: bool) -> Store:
        """Open the same files as a Zarr store."""
        from zarr.storage import LocalStore

        return LocalStore(self.path, read_only=read_only)


class MemoryFiles:
    """Files of a store that lives in memory."""

    def __init__(self) -> None:
        self._buffers: dict[str, Any] = {}

    def names(self) -> list[str]:
        """All names, sorted."""
        return sorted(self._buffers)

    def size(self, name: str) -> int | None:
        """Bytes of a file, None where there is none."""
        return len(self._buffers[name]) if name in self._buffers else None

    def pieces(self, name: str) -> Iterator[bytes]:
        """Read a file in pieces of 1 MiB."""
        buffer = self._buffers[name]
        for start in range(0, len(buffer), _PIECE):
            yield buffer[start : start + _PIECE].to_bytes()

    def append(self, name: str, data: bytes) -> None:
        """Write at the end of a file, which is made if it does not exist."""
        before = self._buffers[name].to_bytes() if name in self._buffers else b""
        self.replace(name, before + data)

    def replace(self, name: str, data: bytes) -> None:
        """Write a whole file."""
        from zarr.buffer import cpu

        self._buffers[name] = cpu.Buffer.from_bytes(data)

    def settle(self, name: str | None = None) -> None:
        """Memory has no device to wait for."""

    def store(self, *, read_only: bool) -> Store:
        """Open the same files as a Zarr store."""
        from zarr.storage import MemoryStore

        return MemoryStore(self._buffers, read_only=read_only)


def digest_file(files: StoreFiles, name: str) -> tuple[int, str]:
    """Read a file once and return its bytes and its SHA-256."""
    size, digest = 0, hashlib.sha256()
    for piece in files.pieces(name):
        size += len(piece)
        digest.update(piece)
    return size, digest.hexdigest()


def sync_folder(path: Path) -> None:
    """Flush the entries of one folder to the device, so that a rename survives a power cut."""
    handle = os.open(path, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)
