"""Whether another file lies in the folder of the one that was named: links out of it are followed only if allowed."""

from __future__ import annotations

import os
from collections.abc import Sequence

from bigsvd.errors import OutsideError

REMEDY = "Add --follow-links if you trust whoever made the file; the other file is then read as this user may read it."
# Links to links: beyond this there is a circle, or somebody plays.
MOST_LINKS = 32


class Home:
    """The folder of a file, or a store that is a folder, with all below it.

    Parameters
    ----------
    path : str
        Absolute. Where it is a link itself, the user named it: the folder that it leads to counts too.
    follow : bool
        Whether links out of it are followed.
    """

    def __init__(self, path: str, *, follow: bool) -> None:
        self.path = path
        self.follow = follow
        real = os.path.realpath(path)
        folders = [path, real] if os.path.isdir(path) else [os.path.dirname(path), os.path.dirname(real)]
        self._roots = tuple({os.path.join(os.path.realpath(folder), "") for folder in folders})

    def holds(self, other: str) -> bool:
        """Whether a path, all links in it resolved, lies in the folder."""
        return os.path.join(os.path.realpath(other), "").startswith(self._roots)

    def outside(self, others: Sequence[str]) -> list[str]:
        """Those paths that lie elsewhere, resolved."""
        return [os.path.realpath(other) for other in others if not self.holds(other)]

    def require(self, name: str, others: Sequence[str], how: str) -> None:
        """Refuse files elsewhere unless links are followed.

        Parameters
        ----------
        name : str
            Of the matrix that needs them.
        others : sequence of str
            Their paths.
        how : str
            What leads there: an external link, a virtual source, …
        """
        found = [] if self.follow else self.outside(others)
        if found:
            raise _refusal(name, found, how)


def _refusal(name: str, files: Sequence[str], how: str) -> OutsideError:
    """The error that names files outside the folder."""
    more = [f"… and {len(files) - 8:,} more"] if len(files) > 8 else []
    error = OutsideError(
        f"{name} lies partly in other files, outside the folder of the one that was named: {how}",
        evidence=[*files[:8], *more],
        remedy=REMEDY,
    )
    error.files = tuple(files)
    return error


def locate(name: str, folder: str) -> str:
    """Path of another file that an HDF5 file names, looked for in the order of the library.

    Beside the file, else as seen from the working directory; a name with a full path there, else its last part beside
    (H5F_prefix_open_file of the HDF5 source, from memory).
    """
    last = os.path.basename(name) if os.path.isabs(name) else name
    tries = [name] if os.path.isabs(name) else []
    tries += [os.path.join(folder, last), os.path.abspath(last)]
    return next((path for path in tries if os.path.exists(path)), tries[0])
