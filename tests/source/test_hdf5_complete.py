"""HDF5 datasets of which parts are absent are refused before any entry is read."""

from __future__ import annotations

from pathlib import Path

import h5py
import numpy as np
import pytest
from source_samples import matrix, read_whole

from bigsvd.errors import DamagedSourceError, UnsupportedMatrixError
from bigsvd.source import check_complete, open_source


def test_complete_datasets_pass(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file["contiguous"] = matrix("f4")
        file.create_dataset("chunked", data=matrix("f4"), chunks=(10, 7), maxshape=(None, None))
        file["chunked"].resize((20, 23))
    for name in ("contiguous", "chunked"):
        check_complete(open_source(tmp_path / "a.h5", name))


def test_chunks_never_written_are_counted_and_the_first_is_named(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "a.h5", "w") as file:
        dataset = file.create_dataset("x", (40, 20), "f4", chunks=(10, 10), compression="gzip")
        dataset[:10] = 1
        dataset[30:, 10:] = 1
    with pytest.raises(DamagedSourceError) as caught:
        check_complete(open_source(tmp_path / "a.h5"))
    assert "5 of 8 chunks are absent" in caught.value.problem
    assert "first absent: chunk (1, 0): rows 10 to 19, columns 0 to 9" in caught.value.evidence[0]
    assert "cannot be told from a lost one" in str(caught.value)


@pytest.mark.parametrize("filters", [{}, {"compression": "gzip"}])
def test_a_contiguous_or_chunked_dataset_of_which_nothing_was_written_is_refused(
    tmp_path: Path, filters: dict[str, str]
) -> None:
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file.create_dataset("x", (40, 20), "f4", **filters)
    with pytest.raises(DamagedSourceError, match="is not complete"):
        check_complete(open_source(tmp_path / "a.h5"))


def test_an_absent_chunk_is_not_read_as_zeros_past_the_library(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file.create_dataset("x", (40, 20), "f4", chunks=(10, 10))[:30] = 1
    with pytest.raises(DamagedSourceError, match=r"chunk \(3, 0\).*\n.*never written"):
        read_whole(open_source(tmp_path / "a.h5"))


def virtual(path: Path, parts: list[tuple[str, str]], rows: int = 10) -> Path:
    """A virtual dataset stacked from parts of 10 rows and 4 columns."""
    layout = h5py.VirtualLayout((rows * len(parts), 4), "f8")
    for number, (name, dataset) in enumerate(parts):
        layout[number * rows : (number + 1) * rows] = h5py.VirtualSource(name, dataset, (rows, 4))
    with h5py.File(path, "w") as file:
        file.create_virtual_dataset("x", layout)
    return path


def part(path: Path, rows: int = 10, written: int | None = None) -> None:
    with h5py.File(path, "w") as file:
        dataset = file.create_dataset("d", (rows, 4), "f8", chunks=(5, 4))
        dataset[: rows if written is None else written] = 1


def test_a_virtual_dataset_with_all_its_sources_passes(tmp_path: Path) -> None:
    for name in ("one.h5", "two.h5"):
        part(tmp_path / name)
    source = open_source(virtual(tmp_path / "a.h5", [("one.h5", "d"), ("two.h5", "d")]))
    check_complete(source)
    assert (read_whole(source) == 1).all()


@pytest.mark.parametrize(
    ("fault", "words"),
    [
        ("file", "two.h5:d: file not found"),
        ("dataset", "two.h5:e: no such dataset in it"),
        ("short", "two.h5:d: it holds 20 entries, the mapping takes 40"),
        ("unwritten", "two.h5:d: 1 of 2 chunks were never written"),
        ("not HDF5", "two.h5:d: .*cannot be opened"),
    ],
)
def test_a_source_of_a_virtual_dataset_that_falls_short_is_named(tmp_path: Path, fault: str, words: str) -> None:
    part(tmp_path / "one.h5")
    if fault != "file":
        part(tmp_path / "two.h5", 5 if fault == "short" else 10, 5 if fault == "unwritten" else None)
    if fault == "not HDF5":
        (tmp_path / "two.h5").write_text("nothing of the kind")
    virtual(tmp_path / "a.h5", [("one.h5", "d"), ("two.h5", "e" if fault == "dataset" else "d")])
    with pytest.raises(DamagedSourceError, match=rf"1 of its 2 sources cannot be used\n *{words}"):
        check_complete(open_source(tmp_path / "a.h5"))


def test_a_source_shorter_than_the_slice_taken_of_it_is_named(tmp_path: Path) -> None:
    part(tmp_path / "one.h5", 20)
    layout = h5py.VirtualLayout((10, 4), "f8")
    layout[:] = h5py.VirtualSource("one.h5", "d", (20, 4))[5:15]
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file.create_virtual_dataset("x", layout)
    check_complete(open_source(tmp_path / "a.h5"))
    part(tmp_path / "one.h5", 10)
    with pytest.raises(DamagedSourceError, match="its shape is 10 × 4, the mapping reaches to 15 × 4"):
        check_complete(open_source(tmp_path / "a.h5"))


def test_holes_between_the_sources_of_a_virtual_dataset_are_counted(tmp_path: Path) -> None:
    part(tmp_path / "one.h5")
    layout = h5py.VirtualLayout((25, 4), "f8")
    layout[:10] = h5py.VirtualSource("one.h5", "d", (10, 4))
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file.create_virtual_dataset("x", layout)
    with pytest.raises(DamagedSourceError, match="its sources cover 40 of 100 entries"):
        check_complete(open_source(tmp_path / "a.h5"))


def test_a_virtual_dataset_over_numbered_files_is_refused(tmp_path: Path) -> None:
    part(tmp_path / "f-0.h5")
    with h5py.File(tmp_path / "a.h5", "w", libver="latest") as file:
        plist = h5py.h5p.create(h5py.h5p.DATASET_CREATE)
        space = h5py.h5s.create_simple((10, 4), (h5py.h5s.UNLIMITED, 4))
        space.select_hyperslab((0, 0), (h5py.h5s.UNLIMITED, 1), stride=(10, 1), block=(10, 4))
        plist.set_virtual(space, b"f-%b.h5", b"d", h5py.h5s.create_simple((10, 4)))
        h5py.h5d.create(file.id, b"x", h5py.h5t.NATIVE_DOUBLE, space, plist)
    with pytest.raises(UnsupportedMatrixError, match="numbered files"):
        check_complete(open_source(tmp_path / "a.h5"))


@pytest.mark.parametrize(("keep", "words"), [(None, "not found"), (100, "100 bytes, 480 are needed")])
def test_external_files_that_are_absent_or_short_are_named(tmp_path: Path, keep: int | None, words: str) -> None:
    values = np.arange(120, dtype="f4").reshape(20, 6)
    with h5py.File(tmp_path / "a.h5", "w") as file:
        external = [(str(tmp_path / "raw.bin"), 0, h5py.h5f.UNLIMITED)]
        file.create_dataset("x", data=values, external=external)
    check_complete(open_source(tmp_path / "a.h5"))
    raw = (tmp_path / "raw.bin").read_bytes()
    (tmp_path / "raw.bin").unlink()
    if keep is not None:
        (tmp_path / "raw.bin").write_bytes(raw[:keep])
    with pytest.raises(DamagedSourceError, match=f"1 of 1 fall short\n.*raw.bin: {words}"):
        check_complete(open_source(tmp_path / "a.h5"))
