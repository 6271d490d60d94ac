"""What a path holds, told from its content and never from its name."""

from __future__ import annotations

import os
import stat
import zipfile
from pathlib import Path

from bigsvd.errors import NoMatrixError, SourceError, UnsupportedMatrixError
from bigsvd.source.persist import PersistentError, persist, unreadable
from bigsvd.units import show_bytes

HDF5_SIGNATURE = b"\x89HDF\r\n\x1a\n"
_ZARR_MARKS = ("zarr.json", ".zarray", ".zgroup")
_KNOWN = (
    (b"\x1f\x8b", "gzip: unpack it first, with gunzip"),
    (b"BZh", "bzip2: unpack it first"),
    (b"\xfd7zXZ", "xz: unpack it first"),
    (b"CDF\x01", "netCDF 3 (classic); netCDF 4 files are read"),
    (b"CDF\x02", "netCDF 3 (64-bit offset); netCDF 4 files are read"),
    (b"II*\x00", "TIFF"),
    (b"MM\x00*", "TIFF"),
    (b"PAR1", "Parquet"),
    (b"%PDF", "PDF"),
    (b"SIMPLE  =", "FITS"),
)


def container(path: Path) -> str:
    """Tell what lies at a path: ``hdf5``, ``zarr``, ``zip``, ``npy`` or ``npz``.

    Parameters
    ----------
    path : Path
        An existing file or directory.

    Returns
    -------
    str
        A Zarr directory is one with Zarr metadata of its own, whatever it is called.

    Raises
    ------
    NoMatrixError
        If nothing is there, or a directory without Zarr metadata.
    UnsupportedMatrixError
        If the file begins like something else; says what it looks like.
    """
    try:
        kind = persist(lambda: os.stat(path)).st_mode
    except FileNotFoundError:
        raise NoMatrixError(f"{path} does not exist", remedy="Check the path.") from None
    except PersistentError as error:
        raise unreadable(str(path), [], error) from error
    except (OSError, ValueError) as error:
        raise SourceError(f"{path} cannot be found", evidence=[str(error)], remedy="Check the path.") from error
    if stat.S_ISDIR(kind):
        return _directory(path)
    if not stat.S_ISREG(kind):
        raise UnsupportedMatrixError(
            f"{path} is neither a file nor a folder but a pipe, a socket or a device",
            remedy="Copy what comes out of it to a file first: bigsvd reads by position, and more than once.",
        )
    try:
        with persist(lambda: path.open("rb")) as file:
            head = file.read(4096)
            size = os.fstat(file.fileno()).st_size
            # The superblock stands at 0, 512 and further doublings, behind a block the user may fill.
            start = 0
            while start < size:
                file.seek(start)
                if file.read(8) == HDF5_SIGNATURE:
                    return "hdf5"
                start = start * 2 or 512
    except PersistentError as error:
        raise unreadable(str(path), [], error) from error
    except OSError as error:
        raise SourceError(f"{path} cannot be read", evidence=[str(error)], remedy="Check its permissions.") from error
    if head.startswith(b"\x93NUMPY"):
        return "npy"
    if head.startswith(b"PK\x03\x04") or head.startswith(b"PK\x05\x06"):
        return "npz" if _is_npz(path) else "zip"
    raise UnsupportedMatrixError(
        f"{path} is neither an HDF5 file, a Zarr store, an .npy nor an .npz file",
        evidence=[f"{show_bytes(size)}; it looks like {looks_like(head)}", f"first bytes: {head[:16]!r}"]
        if head
        else ["it is empty (0 bytes): an interrupted copy or download"],
        remedy="Give one of those four formats.",
    )


def _is_npz(path: Path) -> bool:
    """Whether a zip file holds arrays of NumPy and nothing else."""
    try:
        with zipfile.ZipFile(path) as file:
            names = file.namelist()
    except (zipfile.BadZipFile, OSError, ValueError, NotImplementedError):
        return False
    return bool(names) and all(name.endswith(".npy") and "/" not in name for name in names)


def _directory(path: Path) -> str:
    if any((path / mark).exists() for mark in _ZARR_MARKS):
        return "zarr"
    inside = sorted(entry.name for entry in os.scandir(path) if not entry.name.startswith("."))
    stores = [name for name in inside if any((path / name / mark).exists() for mark in _ZARR_MARKS)]
    raise NoMatrixError(
        f"{path} is a directory without Zarr metadata ({', '.join(_ZARR_MARKS)})",
        evidence=[f"holds: {', '.join(inside[:8])}{', …' if len(inside) > 8 else ''}" if inside else "it is empty"],
        remedy=f"Did you mean {path / stores[0]} ?" if stores else "Give a file, or the directory of a Zarr store.",
    )


def looks_like(head: bytes) -> str:
    """Name what a file that is none of ours, and not empty, begins like."""
    start = head.lstrip()[:64].lower()
    if head.startswith(b"MATLAB 5.0"):
        return 'MATLAB v5; save it again in MATLAB with save(…, "-v7.3")'
    if start.startswith((b"<!doctype html", b"<html", b"<?xml")):
        return "a web page (HTML or XML): a download that answered with a page instead of the file"
    for magic, words in _KNOWN:
        if head.startswith(magic):
            return words
    if not head.strip(b"\0"):
        return "nothing but zero bytes: a copy that was never finished"
    if start.startswith((b"{", b"[")):
        return "JSON text"
    if all(byte >= 32 or byte in b"\t\r\n\f" for byte in head):
        return "text"
    return "binary data of a kind not known here"
