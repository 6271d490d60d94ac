"""The record in the root attributes: what the store says of itself, the digest of every file, and their check."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from pathlib import Path, PurePosixPath
from typing import Any

from bigsvd.errors import DamagedResultError, IncompleteResultError, ResultError
from bigsvd.factors.files import FolderFiles, StoreFiles, digest_file
from bigsvd.factors.layout import FORMAT, VECTORS
from bigsvd.units import show_count

ROOT = "zarr.json"
RESERVED = ("format", "complete", "created", "shape", "rank", "manifest", "digest")


def root_document(record: Mapping[str, Any], files: StoreFiles) -> bytes:
    """Build the root ``zarr.json``: the sealed record, and every array's metadata once more.

    The copy ("consolidated metadata") is what lets xarray open the store without a warning and in one read.
    """
    names = [name for name in files.names() if name != ROOT and name.endswith(f"/{ROOT}")]
    metadata = {name.removesuffix(f"/{ROOT}"): _load(files, name) for name in names}
    document = {
        "zarr_format": 3,
        "node_type": "group",
        "attributes": {"bigsvd": {**record, "digest": record_digest(record)}},
        "consolidated_metadata": {"kind": "inline", "must_understand": False, "metadata": metadata},
    }
    return json.dumps(document, indent=1, allow_nan=False).encode("ascii")


def record_digest(record: Mapping[str, Any]) -> str:
    """SHA-256 of a record as JSON with sorted keys, no spaces and ASCII escapes, its own ``digest`` left out."""
    rest = {key: value for key, value in record.items() if key != "digest"}
    text = json.dumps(rest, sort_keys=True, separators=(",", ":"), ensure_ascii=True, allow_nan=False)
    return hashlib.sha256(text.encode("ascii")).hexdigest()


def read_record(path: Path) -> dict[str, Any]:
    """Read what a store says of itself and check that nobody changed it.

    Parameters
    ----------
    path : Path
        The store.

    Returns
    -------
    dict
        The ``bigsvd`` attribute as stored.

    Raises
    ------
    ResultError
        If there is no such folder, it is not a bigsvd result, or a newer version wrote it.
    IncompleteResultError
        If it was never finished.
    DamagedResultError
        If its metadata cannot be read or was changed.
    """
    if not path.is_dir():
        what = "is a file, not a result folder" if path.exists() else "does not exist"
        raise ResultError(f"{path} {what}", remedy="Name the folder that decompose --out wrote.")
    record = _attribute(path)
    version = record.get("format")
    if not isinstance(version, int) or version > FORMAT:
        raise ResultError(
            f"{path} has result format {version}, this version of bigsvd reads up to format {FORMAT}",
            remedy="Update bigsvd: pip install --upgrade bigsvd",
        )
    if record.get("complete") is not True:
        raise incomplete(path, 'its attributes do not say "complete": true')
    try:
        intact = record.get("digest") == record_digest(record)
    except ValueError:
        intact = False
    if not intact or not isinstance(record.get("manifest"), dict):
        raise DamagedResultError(
            f"the attributes of {path} were changed since the result was written",
            evidence=[f"file: {ROOT}", f"digest: {record.get('digest')}, of the attributes as they are: another"],
            remedy=_remedy(),
        )
    return record


def compare_files(files: StoreFiles, record: Mapping[str, Any], *, contents: bool) -> None:
    """Compare every file with the manifest.

    Parameters
    ----------
    files : StoreFiles
        The files of the store.
    record : mapping
        The ``bigsvd`` attribute.
    contents : bool
        Whether to read every file and compare its digest; else sizes only.

    Raises
    ------
    DamagedResultError
        Names the array and the file of the first difference, and how many there are.
    """
    found = [
        difference
        for name, (size, digest) in record["manifest"].items()
        if (difference := _difference(files, name, size, digest, contents))
    ]
    copies = _load(files, ROOT).get("consolidated_metadata", {}).get("metadata", {}) if not found and contents else {}
    for name, copy in copies.items():
        own = _load(files, f"{name}/{ROOT}") if files.size(f"{name}/{ROOT}") is not None else {}
        # Zarr itself rewrites the copy of a group when a user adds an attribute; arrays it leaves as they are.
        if any(copy.get(key) != own.get(key) for key in (own if own.get("node_type") == "array" else ("attributes",))):
            found.append(f"{part_of(name)}: the copy of its metadata in {ROOT} differs from {name}/{ROOT}")
    if found:
        count = f" and {show_count(len(found) - 1)} more" if len(found) > 1 else ""
        raise DamagedResultError(f"the result is damaged: {found[0]}{count}", evidence=found[1:6], remedy=_remedy())


def part_of(name: str) -> str:
    """The array or group that a file belongs to.

    >>> part_of("left_vectors/c.3.0"), part_of("spectrum/value/zarr.json"), part_of("certificate/zarr.json")
    ('left_vectors', 'spectrum/value', 'certificate')
    """
    path = PurePosixPath(name)
    return path.parent.as_posix() if path.name == ROOT or path.name.startswith("c.") else name


def incomplete(path: Path, why: str) -> IncompleteResultError:
    """Say that a store was never finished."""
    return IncompleteResultError(
        f"{path} was never finished", evidence=[why], remedy="Run decompose again with the same --out."
    )


def _difference(files: StoreFiles, name: str, size: int, digest: str, contents: bool) -> str:
    """Say how a file differs from the manifest; empty if it does not."""
    found = files.size(name)
    if found is None:
        return f"{part_of(name)}: file {name} is missing"
    if found != size:
        return f"{part_of(name)}: file {name} has {show_count(found)} bytes, {show_count(size)} were written"
    if contents:
        try:
            actual = digest_file(files, name)[1]
        except OSError as error:
            return f"{part_of(name)}: file {name} cannot be read ({error.strerror})"
        if actual != digest:
            return f"{part_of(name)}: file {name} has its size, but not the bytes that were written (SHA-256 differs)"
    return ""


def _attribute(path: Path) -> dict[str, Any]:
    """Read the ``bigsvd`` attribute of a folder."""
    ours = any((path / name).is_dir() for name in VECTORS)
    if not (path / ROOT).is_file() and not ours:
        raise ResultError(f"{path} is not a bigsvd result: it has no {ROOT}", remedy=_name_result())
    try:
        document = _load(FolderFiles(path), ROOT)
    except (OSError, ValueError) as error:
        raise DamagedResultError(
            f"the root metadata of {path} cannot be read", evidence=[f"file: {ROOT}", str(error)], remedy=_remedy()
        ) from error
    attributes = document.get("attributes") if isinstance(document, dict) else None
    record = attributes.get("bigsvd") if isinstance(attributes, dict) else None
    if not isinstance(record, dict):
        if ours:
            raise DamagedResultError(
                f"the root metadata of {path} has lost the attribute bigsvd",
                evidence=[f"file: {ROOT}"],
                remedy=_remedy(),
            )
        raise ResultError(f"{path} is a Zarr store, but not a bigsvd result", remedy=_name_result())
    return record


def _load(files: StoreFiles, name: str) -> Any:
    """Read one file of JSON."""
    return json.loads(b"".join(files.pieces(name)))


def _name_result() -> str:
    return "Name the folder that decompose --out wrote."


def _remedy() -> str:
    return "Restore it from a copy, or run decompose again with --overwrite."
