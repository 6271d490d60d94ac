"""The keys of a Zarr store on disk, in a directory or a zip file, without reading any chunk."""

from __future__ import annotations

import json
import os
import stat
import zipfile
from collections.abc import Iterator
from pathlib import Path
from typing import Any, Protocol

from bigsvd.errors import DamagedSourceError

METADATA = ("zarr.json", ".zarray", ".zgroup")


class KeyStore(Protocol):
    """What completeness and surveys need to know of a store."""

    path: str

    def get(self, key: str) -> bytes | None:
        """Value of a key, None where there is none."""
        ...

    def children(self, key: str) -> Iterator[tuple[str, bool]]:
        """Names directly below a key, and whether each is a file."""
        ...

    def size(self, key: str) -> int | None:
        """Bytes of a value, None where there is none."""
        ...

    def part(self, key: str, start: int, size: int) -> bytes:
        """Some bytes of a value; a negative start counts from its end."""
        ...


class DirectoryKeys:
    """Keys of a store that is a directory."""

    def __init__(self, path: str) -> None:
        self.path = path

    def _at(self, key: str) -> str:
        return os.path.join(self.path, key) if key else self.path

    def get(self, key: str) -> bytes | None:
        """Read a small value whole."""
        try:
            return Path(self._at(key)).read_bytes()
        except (FileNotFoundError, IsADirectoryError, NotADirectoryError):
            return None

    def children(self, key: str) -> Iterator[tuple[str, bool]]:
        """List a directory without holding it; nothing where there is none."""
        try:
            with os.scandir(self._at(key)) as entries:
                for entry in entries:
                    yield entry.name, entry.is_file()
        except (FileNotFoundError, NotADirectoryError):
            return

    def size(self, key: str) -> int | None:
        """Ask the file system; a directory in place of a file counts as absent."""
        try:
            found = os.stat(self._at(key))
        except (FileNotFoundError, NotADirectoryError):
            return None
        return found.st_size if stat.S_ISREG(found.st_mode) else None

    def part(self, key: str, start: int, size: int) -> bytes:
        """Read a few bytes of a file."""
        with open(self._at(key), "rb") as file:
            file.seek(start, os.SEEK_END if start < 0 else os.SEEK_SET)
            return file.read(size)


class ZipKeys:
    """Keys of a store in one zip file, below the folder in which its root lies."""

    def __init__(self, path: str) -> None:
        self.path = path
        try:
            with zipfile.ZipFile(path) as file:
                sizes = {info.filename: info.file_size for info in file.infolist() if not info.is_dir()}
        except (zipfile.BadZipFile, OSError, ValueError) as error:
            raise DamagedSourceError(
                f"{path} begins like a zip file but cannot be opened",
                evidence=[str(error), f"{os.path.getsize(path):,} bytes in the file"],
                remedy="Copy or download the file again.",
            ) from error
        self.root = _root_folder(sizes)
        self._sizes = {name[len(self.root) :]: size for name, size in sizes.items() if name.startswith(self.root)}
        self._below: dict[str, dict[str, bool]] = {}
        for name in self._sizes:
            parts = name.split("/")
            for depth, part in enumerate(parts):
                self._below.setdefault("/".join(parts[:depth]), {})[part] = depth == len(parts) - 1

    def get(self, key: str) -> bytes | None:
        """Read a small value whole."""
        if key not in self._sizes:
            return None
        with zipfile.ZipFile(self.path) as file:
            return file.read(self.root + key)

    def children(self, key: str) -> Iterator[tuple[str, bool]]:
        """List from the directory of the zip file."""
        yield from self._below.get(key, {}).items()

    def size(self, key: str) -> int | None:
        """Look up the directory of the zip file."""
        return self._sizes.get(key)

    def part(self, key: str, start: int, size: int) -> bytes:
        """Cut a few bytes out of a value."""
        value = self.get(key) or b""
        start = max(0, len(value) + start) if start < 0 else start
        return value[start : start + size]


def _root_folder(names: dict[str, int]) -> str:
    """Folder inside the zip file in which the store begins: the shortest that holds metadata."""
    folders = [name[: -len(mark)] for name in names for mark in METADATA if name.rsplit("/", 1)[-1] == mark]
    return min(folders, key=lambda folder: (folder.count("/"), folder), default="")


def open_keys(path: str) -> KeyStore:
    """List a store by its path."""
    return DirectoryKeys(path) if os.path.isdir(path) else ZipKeys(path)


def read_document(keys: KeyStore, key: str) -> dict[str, Any] | None:
    """Read a metadata document; None where there is none.

    Raises
    ------
    DamagedSourceError
        If it is there and is not a JSON object.
    """
    text = keys.get(key)
    if text is None:
        return None
    try:
        document = json.loads(text)
    except ValueError as error:
        raise _unreadable(keys, key, f"{len(text)} bytes; {error}") from error
    if not isinstance(document, dict):
        raise _unreadable(keys, key, f"a JSON object is expected, not {type(document).__name__}")
    return document


def _unreadable(keys: KeyStore, key: str, why: str) -> DamagedSourceError:
    return DamagedSourceError(
        f"the Zarr metadata at {keys.path}/{key} cannot be read",
        evidence=[why],
        remedy="Copy the store again, or restore that one file.",
    )
