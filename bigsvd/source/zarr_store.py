"""The keys of a Zarr store on disk, in a directory or a zip file, without reading any chunk."""

from __future__ import annotations

import errno
import json
import os
import stat
import zipfile
from collections.abc import Iterator
from typing import Any, Protocol

from bigsvd.errors import DamagedSourceError
from bigsvd.source.home import Home
from bigsvd.source.persist import persist

# Consolidated metadata of a hundred thousand arrays have about as much.
MOST_METADATA = 64 * 2**20
METADATA = ("zarr.json", ".zarray", ".zgroup")


class KeyStore(Protocol):
    """What completeness and surveys need to know of a store."""

    path: str

    def get(self, key: str) -> bytes | None:
        """Value of a key, None where there is none."""
        ...

    def children(self, key: str, links: list[str] | None = None) -> Iterator[tuple[str, bool]]:
        """Names directly below a key, and whether each is a file."""
        ...

    def size(self, key: str) -> int | None:
        """Bytes of a value, None where there is none."""
        ...

    def part(self, key: str, start: int, size: int) -> bytes:
        """Some bytes of a value; a negative start counts from its end."""
        ...


class DirectoryKeys:
    """Keys of a store that is a directory.

    Parameters
    ----------
    path : str
    follow : bool
        Whether symbolic links out of the store are followed.
    """

    def __init__(self, path: str, *, follow: bool = False) -> None:
        self.path = path
        self._home = Home(path, follow=follow)
        self._inside: set[str] = set()

    def _at(self, key: str) -> str:
        return os.path.join(self.path, key) if key else self.path

    def _require_inside(self, path: str) -> None:
        self._home.require(self.path, [path], f"the symbolic link {path}")

    def _checked(self, key: str) -> str:
        """Path of a key whose folder lies in the store."""
        path = self._at(key)
        folder = os.path.dirname(path)
        if folder not in self._inside:
            self._require_inside(folder)
            self._inside.add(folder)
        return path

    def open(self, key: str) -> int:
        """Open a value for reading and return its descriptor; a link out of the store is refused.

        Raises
        ------
        FileNotFoundError, NotADirectoryError
            If there is no such key.
        OutsideError
            If it, or a folder on the way, is a symbolic link out of the store, and links are not followed.
        """
        path = self._checked(key)
        # A pipe would be waited for.
        flags = os.O_RDONLY | os.O_CLOEXEC | os.O_NONBLOCK
        try:
            return persist(lambda: os.open(path, flags | os.O_NOFOLLOW))
        except OSError as error:
            if error.errno != errno.ELOOP:
                raise
        self._require_inside(path)
        return persist(lambda: os.open(path, flags))

    def get(self, key: str) -> bytes | None:
        """Read a small value whole."""
        try:
            descriptor = self.open(key)
        except (FileNotFoundError, NotADirectoryError):
            return None
        with open(descriptor, "rb") as file:
            found = os.fstat(descriptor)
            if not stat.S_ISREG(found.st_mode):
                return None
            require_small(self.path, key, found.st_size)
            return persist(lambda: file.read(MOST_METADATA + 1))

    def children(self, key: str, links: list[str] | None = None) -> Iterator[tuple[str, bool]]:
        """List a directory without holding it; nothing where there is none.

        A symbolic link out of the store is refused, or noted in `links` where that is given.
        """
        try:
            with persist(lambda: os.scandir(self._at(key))) as entries:
                for entry in entries:
                    if entry.is_symlink() and links is not None and not self._home.follow:
                        if not self._home.holds(entry.path):
                            links.append(entry.path)
                            continue
                    elif entry.is_symlink():
                        self._require_inside(entry.path)
                    yield entry.name, entry.is_file()
        except (FileNotFoundError, NotADirectoryError):
            return

    def size(self, key: str) -> int | None:
        """Ask the file system; a directory in place of a file counts as absent."""
        path = self._checked(key)
        try:
            found = persist(lambda: os.lstat(path))
            if stat.S_ISLNK(found.st_mode):
                self._require_inside(path)
                found = os.stat(path)
        except (FileNotFoundError, NotADirectoryError):
            return None
        return found.st_size if stat.S_ISREG(found.st_mode) else None

    def part(self, key: str, start: int, size: int) -> bytes:
        """Read a few bytes of a file."""
        descriptor = self.open(key)
        try:
            whole = os.fstat(descriptor).st_size
            start = max(0, whole + start) if start < 0 else start
            # A damaged size must not be allocated.
            size = min(size, whole)
            return persist(lambda: os.pread(descriptor, size, start))
        finally:
            os.close(descriptor)


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
        require_small(self.path, key, self._sizes[key])
        with zipfile.ZipFile(self.path) as file:
            return file.read(self.root + key)

    def children(self, key: str, links: list[str] | None = None) -> Iterator[tuple[str, bool]]:
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


def require_small(path: str, key: str, size: int) -> None:
    """Refuse metadata of a size that nobody writes, before they are read."""
    if size > MOST_METADATA:
        raise DamagedSourceError(
            f"the Zarr metadata at {path}/{key} have {size:,} bytes, more than the {MOST_METADATA:,} read here",
            remedy="Open the array below it by --matrix, or write the metadata again without consolidating them.",
        )


def open_keys(path: str, *, follow: bool = False) -> KeyStore:
    """List a store by its path; links out of it are followed only if told so."""
    return DirectoryKeys(path, follow=follow) if os.path.isdir(path) else ZipKeys(path)


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
    except (ValueError, RecursionError) as error:
        raise _unreadable(keys, key, f"{len(text)} bytes; {error}") from error
    if not isinstance(document, dict):
        raise _unreadable(keys, key, f"a JSON object is expected, not {type(document).__name__}")
    return document


def group_attributes(keys: KeyStore, path: str) -> dict[str, Any]:
    """Attributes of a group in either format; empty where there are none."""
    at = f"{path}/" if path else ""
    third = read_document(keys, f"{at}zarr.json")
    attributes = third.get("attributes") if third is not None else read_document(keys, f"{at}.zattrs")
    return attributes if isinstance(attributes, dict) else {}


def _unreadable(keys: KeyStore, key: str, why: str) -> DamagedSourceError:
    return DamagedSourceError(
        f"the Zarr metadata at {keys.path}/{key} cannot be read",
        evidence=[why],
        remedy="Copy the store again, or restore that one file.",
    )
