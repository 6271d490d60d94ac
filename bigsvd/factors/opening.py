"""Opening a result store: what is incomplete, damaged or foreign is refused, and the part named."""

from __future__ import annotations

import os
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from bigsvd.certify import Certificate
from bigsvd.errors import ResultError
from bigsvd.factors.files import FolderFiles, StoreFiles
from bigsvd.factors.layout import VALUES
from bigsvd.factors.lock import OutputLock
from bigsvd.factors.manifest import RESERVED, compare_files, incomplete, read_record
from bigsvd.factors.place import Place, repair
from bigsvd.factors.plain import from_plain
from bigsvd.factors.result import Factors, Spectrum, root_identity
from bigsvd.factors.stored_axes import StoredAxes, names_in

if TYPE_CHECKING:
    import zarr


def open_factors(path: Path | str, check: bool = True) -> Factors:
    """Open a result.

    An exchange that a dying `--overwrite` left half done is finished first.

    Parameters
    ----------
    path : Path or str
        The folder that `decompose` wrote.
    check : bool
        Read every file and compare it with its digest (about 1 GB/s); False compares sizes only, and the digest of
        the attributes.

    Returns
    -------
    Factors
        The vectors stay on disk until sliced.

    Raises
    ------
    ResultError
        If there is no such folder, it is not a bigsvd result, or a newer version wrote it.
    IncompleteResultError
        If it was never finished.
    DamagedResultError
        If a file is missing, has another size or other bytes than were written, or the attributes were changed; names
        the array and the file.

    Examples
    --------
    >>> open_factors("no-such.zarr")
    Traceback (most recent call last):
        ...
    bigsvd.errors.ResultError: ...no-such.zarr does not exist
    Name the folder that decompose --out wrote.
    """
    path = Path(path).expanduser().absolute()
    if path.name.endswith(".partial"):
        raise incomplete(path, "its name ends in .partial: a run writes it, or died while it did")
    if os.path.lexists(path.with_name(f"{path.name}.replaced")):
        _finish_exchange(path)
    record = read_record(path)
    files = FolderFiles(path)
    identity = root_identity(path)
    compare_files(files, record, contents=check)
    return load_factors(files, record, path, identity)


def load_factors(files: StoreFiles, record: dict[str, Any], path: Path | None, identity: tuple[int, ...]) -> Factors:
    """Open the arrays of a store that was checked."""
    import zarr

    # Each array's own metadata is under the manifest; the copy in the root is for other readers.
    store = files.store(read_only=True)
    group = zarr.open_group(store, mode="r", zarr_format=3, use_consolidated=False)

    def vectors(name: str) -> zarr.Array[Any]:
        array = group[name]
        assert isinstance(array, zarr.Array)
        return array

    def members(name: str) -> dict[str, np.ndarray]:
        part = group[name]
        assert isinstance(part, zarr.Group)
        return {key: np.asarray(array[...]) for key, array in part.arrays()}

    labels = {name: np.asarray(vectors(name)[...]) for name in names_in(record) if name in group}

    def names(name: str) -> zarr.Array[Any] | None:
        return vectors(name) if name in group else None

    left, right = vectors("left_vectors"), vectors("right_vectors")
    return Factors(
        shape=(left.shape[0], right.shape[0]),
        rank=left.shape[1],
        left_vectors=left,
        right_vectors=right,
        **{name: np.asarray(vectors(name)[...]) for name in VALUES},
        spectrum=Spectrum(**members("spectrum")),
        certificate=Certificate.restore(members("certificate"), from_plain(dict(group["certificate"].attrs))),
        attributes={key: from_plain(entry) for key, entry in record.items() if key not in RESERVED or key == "created"},
        axes=StoredAxes.restore(record["axes"], labels) if "axes" in record else None,
        path=path,
        sample_names=names("row_name"),
        feature_names=names("column_name"),
        _root=identity,
    )


def _finish_exchange(path: Path) -> None:
    """Repair what a process left that died while replacing this result; leave it where that is not allowed."""
    place = Place.at(path)
    lock = OutputLock(place.lock, place.out)
    if not os.access(place.out.parent, os.W_OK):
        if os.path.lexists(place.out):
            return
        raise ResultError(
            f"{path} is missing: a run died while it replaced the earlier result, and this folder cannot be written",
            evidence=[f"earlier result: {place.replaced}"],
            remedy="Ask its owner to open it once, which finishes the exchange.",
        )
    try:
        lock.acquire()
    except ResultError:
        # A living writer is at work: whatever stands at OUT is whole, the earlier result or the new one.
        if os.path.lexists(place.out):
            return
        raise
    try:
        repair(place)
    finally:
        lock.release()
