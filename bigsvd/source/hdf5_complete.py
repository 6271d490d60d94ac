"""Whether all of an HDF5 dataset is there: chunks, external files, sources of a virtual dataset."""

from __future__ import annotations

import math
import os
from typing import Any

from bigsvd.errors import DamagedSourceError, OutsideError, SourceError, UnsupportedMatrixError
from bigsvd.source.access import Access
from bigsvd.source.complete import SHOWN, first_chunks, settle_absent
from bigsvd.source.fill import hdf5_fill
from bigsvd.source.hdf5_chunks import absent_chunks
from bigsvd.source.hdf5_file import open_hdf5
from bigsvd.source.hdf5_links import require_path_inside
from bigsvd.source.home import Home, locate
from bigsvd.source.rectangle import grid_shape
from bigsvd.source.spec import MatrixSpec
from bigsvd.units import show_count, show_shape

MEANT = "write the dataset again in full, zeros included."


def require_complete(dataset: Any, spec: MatrixSpec, home: Home, access: Access) -> MatrixSpec:
    """Refuse a dataset of which parts are absent, without reading entries.

    Parameters
    ----------
    dataset : h5py.Dataset
        Of two or more axes.
    spec : MatrixSpec
        What is known of it.
    home : Home
        Where the file lies.
    access : Access

    Returns
    -------
    MatrixSpec
        With the absent chunks that are to be filled.
    """
    if dataset.is_virtual:
        _require_sources(dataset, spec, home)
        return spec
    if dataset.external:
        _require_external(dataset, spec)
        return spec
    count, grid, places = count_never_written(dataset, spec)
    return settle_absent(spec, count, grid, places, access, lambda: hdf5_fill(dataset, spec.dtype), MEANT)


def count_never_written(dataset: Any, spec: MatrixSpec) -> tuple[int, int, list[str]]:
    """How many chunks were never written, of how many, and where the first of them lie."""
    if dataset.chunks is None:
        # Space is set aside at the first writing: none of it, or all.
        return int(dataset.id.get_storage_size() == 0), 1, ["all of it: its space in the file was never written"]
    grid = math.prod(grid_shape(dataset.shape, dataset.chunks))
    if dataset.id.get_num_chunks() >= grid:
        return 0, grid, []
    absent = absent_chunks(dataset, spec.name)
    return int(absent.sum()), grid, first_chunks(absent, dataset.shape, dataset.chunks)


def _folder(dataset: Any) -> str:
    """Where the file lies that holds a dataset: other files are named relative to it."""
    return os.path.dirname(os.path.abspath(dataset.file.filename))


def _require_external(dataset: Any, spec: MatrixSpec) -> None:
    folder = _folder(dataset)
    needed, faults = entry_bytes(dataset), []
    for name, offset, size in dataset.external:
        path = locate(os.fsdecode(name), folder)
        want = min(size, needed)
        needed -= want
        found = os.path.getsize(path) if os.path.isfile(path) else None
        if found is None:
            faults.append(f"{path}: not found")
        elif found < offset + want:
            faults.append(f"{path}: {show_count(found)} bytes, {show_count(offset + want)} are needed")
    if faults:
        raise DamagedSourceError(
            f"{spec.name} keeps its entries in external files, and {len(faults)} of {len(dataset.external)} fall short",
            evidence=faults[:SHOWN],
            remedy="Put the external files beside the HDF5 file, complete.",
        )


def entry_bytes(dataset: Any) -> int:
    """Bytes of all entries as they are stored without filters."""
    return int(math.prod(dataset.shape) * dataset.dtype.itemsize)


def _require_sources(dataset: Any, spec: MatrixSpec, home: Home) -> None:
    faults, covered = [], 0
    sources = dataset.virtual_sources()
    for source in sources:
        if "%" in source.file_name or "%" in source.dset_name:
            raise UnsupportedMatrixError(
                f"{spec.name} is virtual over numbered files ({source.file_name}): a missing one would not show",
                remedy="Copy it into one dataset first, or name its files one by one.",
            )
        covered += source.vspace.get_select_npoints()
        fault = _source_fault(dataset, source, home)
        if fault:
            faults.append(f"{source.file_name}:{source.dset_name}: {fault}")
    if faults:
        raise DamagedSourceError(
            f"{spec.name} is virtual, and {len(faults)} of its {len(sources)} sources cannot be used",
            evidence=faults[:SHOWN],
            remedy="Put the source files where the virtual dataset names them, complete.",
        )
    # Mappings written by one program do not overlap; fewer entries than the matrix has means a hole.
    if covered < math.prod(dataset.shape):
        raise DamagedSourceError(
            f"{spec.name} is not complete: its sources cover {show_count(covered)} of"
            f" {show_count(math.prod(dataset.shape))} entries",
            evidence=["what no source covers would be read as the fill value"],
            remedy=f"Copy the data again from its origin, or {MEANT}",
        )


def _source_fault(dataset: Any, source: Any, home: Home) -> str:
    """What is wrong with one source of a virtual dataset; empty if nothing."""
    if source.file_name == ".":
        return _dataset_fault(dataset.file, source, home)
    path = locate(source.file_name, _folder(dataset))
    if not os.path.isfile(path):
        return "file not found"
    try:
        with open_hdf5(path) as file:
            return _dataset_fault(file, source, home)
    except OutsideError:
        raise
    except SourceError as error:
        return error.problem


def _extent_fault(shape: tuple[int, ...], source: Any) -> str:
    """Whether what is there holds the part that the mapping takes; the library fills or hangs where it does not."""
    import h5py

    if source.src_space.get_select_type() == h5py.h5s.SEL_ALL:
        # Taken whole: the mapping tells no extent of the source, only how many entries it makes.
        taken = source.vspace.get_select_npoints()
        whole = math.prod(shape)
        return "" if whole == taken else f"it holds {show_count(whole)} entries, the mapping takes {show_count(taken)}"
    end = tuple(last + 1 for last in source.src_space.get_select_bounds()[1])
    if len(end) != len(shape) or any(side < need for side, need in zip(shape, end, strict=True)):
        return f"its shape is {show_shape(shape)}, the mapping reaches to {show_shape(end)}"
    return ""


def _dataset_fault(file: Any, source: Any, home: Home) -> str:
    require_path_inside(file, source.dset_name, home)
    found = file.get(source.dset_name)
    if found is None or not hasattr(found, "chunks"):
        return "no such dataset in it"
    fault = _extent_fault(found.shape, source)
    if fault:
        return fault
    if found.chunks is not None:
        grid = math.prod(-(-side // chunk) for side, chunk in zip(found.shape, found.chunks, strict=True))
        if found.id.get_num_chunks() < grid:
            return f"{show_count(grid - found.id.get_num_chunks())} of {show_count(grid)} chunks were never written"
    elif found.is_virtual or found.external:
        # Whether it is complete itself, and where that would lead, is not followed further.
        return "it is put together from other files itself"
    elif found.id.get_storage_size() == 0:
        return "it was never written"
    return ""
