"""Whether the input is still the one the run began with."""

from __future__ import annotations

import hashlib
import os
from collections.abc import Iterable
from dataclasses import dataclass

from bigsvd.errors import SourceChangedError
from bigsvd.source.persist import PersistentError, persist, unreadable
from bigsvd.units import show_count


@dataclass(frozen=True)
class FileStamp:
    """Size and times of a file when it was opened."""

    path: str
    size: int
    modified_ns: int
    inode: int

    @classmethod
    def of(cls, path: str) -> FileStamp:
        """Take the stamp of a file as it is now."""
        found = persist(lambda: os.stat(path))
        return cls(path, found.st_size, found.st_mtime_ns, found.st_ino)

    def require_unchanged(self) -> None:
        """Refuse a file that was written to, replaced or removed since; one system call."""
        try:
            now = FileStamp.of(self.path)
        except PersistentError as error:
            raise unreadable(self.path, [], error) from error
        except OSError as error:
            raise SourceChangedError(
                f"{self.path} could be opened before and cannot be found now",
                evidence=[str(error)],
                remedy="Put the file back and run the same command again.",
            ) from error
        if now != self:
            raise SourceChangedError(
                f"{self.path} changed while it was being read",
                evidence=[f"{name}: {before}, now {after}" for name, before, after in self._differences(now)],
                remedy="Wait until nothing writes to the file, then start again from the beginning.",
            )

    def _differences(self, now: FileStamp) -> Iterable[tuple[str, str, str]]:
        if now.size != self.size:
            yield "bytes", show_count(self.size), show_count(now.size)
        if now.modified_ns != self.modified_ns:
            yield "modified (ns since 1970)", str(self.modified_ns), str(now.modified_ns)
        if now.inode != self.inode:
            yield "inode", str(self.inode), str(now.inode)


def digest(*parts: object) -> str:
    """Short name of everything that identifies an input."""
    return hashlib.blake2b("\n".join(map(str, parts)).encode(), digest_size=16).hexdigest()
