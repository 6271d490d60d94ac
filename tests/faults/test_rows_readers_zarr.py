"""Rows 1 to 18 of the list of faults: Zarr stores of which parts are absent, damaged, odd or described wrongly."""

from __future__ import annotations

import json
import shutil
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numcodecs
import numpy as np
import pytest
import zarr
from fault_samples import run
from reader_samples import CHUNK, SHAPE, Scene, change, flip, matrix, scenes, stage, write_zarr
from zarr.codecs import BytesCodec, Crc32cCodec, GzipCodec, ZstdCodec

import bigsvd

ROWS = {
    1: ["test_01_a_deleted_chunk_stops_before_computing"],
    2: ["test_02_a_folder_in_place_of_a_chunk_is_no_chunk"],
    4: ["test_04_chunks_left_out_on_purpose_are_accepted_when_told_so"],
    5: ["test_05_a_chunk_cut_short_is_named_with_sizes"],
    6: ["test_06_an_empty_shard_is_named"],
    7: ["test_07_a_damaged_shard_index_is_named"],
    8: ["test_08_a_flipped_bit_without_checksum_is_read_as_any_number"],
    9: ["test_09_a_flipped_bit_under_a_checksum_is_named"],
    10: ["test_10_metadata_cut_short_empty_or_missing_are_named"],
    11: ["test_11_a_shape_larger_than_the_chunks_stops"],
    12: ["test_12_a_wrong_separator_is_suggested"],
    13: ["test_13_another_type_of_another_size_does_not_decode"],
    14: ["test_14_a_wrong_chunk_shape_does_not_decode"],
    15: ["test_15_what_is_not_known_is_named"],
    16: ["test_16_two_descriptions_must_agree"],
    17: ["test_17_stale_consolidated_metadata_are_not_believed"],
    18: ["test_18_a_zip_file_cut_short_is_named"],
}
EXPLAINED = {
    8: "without a checksum a flipped bit is a number like any other in the first read; that a file changes between two"
    " reads is caught by the sums of raw words (tests/sweep) and by its size and time",
    13: "another type of the same size (f4 for i4) decodes to other numbers, which nothing in the store contradicts",
}


@pytest.fixture(scope="module")
def earlier() -> Iterator[Path]:
    yield from scenes()


@pytest.fixture
def scene(earlier: Path, tmp_path: Path) -> Scene:
    return stage(earlier, tmp_path)


@pytest.mark.parametrize("zarr_format", [2, 3])
def test_01_a_deleted_chunk_stops_before_computing(scene: Scene, zarr_format: Any) -> None:
    file = write_zarr(scene.folder / "a.zarr", zarr_format=zarr_format)
    (file / ("c/2/1" if zarr_format == 3 else "2.1")).unlink()
    text = scene.refused(file)
    assert "a.zarr is not complete: 1 of 12 chunks is absent" in text
    assert "first absent: chunk (2, 1): rows 20 to 29, columns 20 to 39 (counted from 0)" in text
    assert "Copy the data again from its origin" in text
    assert "--absent fill" in text


@pytest.mark.parametrize("zarr_format", [2, 3])
def test_02_a_folder_in_place_of_a_chunk_is_no_chunk(scene: Scene, zarr_format: Any) -> None:
    file = write_zarr(scene.folder / "a.zarr", zarr_format=zarr_format)
    chunk = file / ("c/2/1" if zarr_format == 3 else "2.1")
    chunk.unlink()
    chunk.mkdir()
    assert "1 of 12 chunks is absent" in scene.refused(file)
    # It was not left out on purpose, so that it is not filled either.
    text = scene.refused(file, "--absent", "fill")
    assert "chunk (2, 1)" in text
    assert "what stands in its place is no file" in text


def test_04_chunks_left_out_on_purpose_are_accepted_when_told_so(scene: Scene) -> None:
    values = matrix().copy()
    values[10:30, 20:] = 1.5
    file = write_zarr(scene.folder / "a.zarr", values, fill_value=1.5, config={"write_empty_chunks": False})
    assert "2 of 12 chunks are absent" in scene.refused(file)
    listed = run("inspect", file)
    assert (
        "2 chunks were never written; decompose stops at that, or reads the fill value with --absent fill"
        in " ".join(listed.stdout.split())
    )
    assert json.loads(run("inspect", file, "--json").stdout)["matrices"][0]["absent_chunks"] == 2
    first = "chunk (1, 1): rows 10 to 19, columns 20 to 39 (counted from 0)"
    planned = run("plan", file, "--absent", "fill", "--rank", 2)
    assert f"caution 2 of 12 chunks are absent and read as 1.5; first {first}" in " ".join(planned.stdout.split())
    found = scene.done(file, "--absent", "fill")
    absent = {"chunks": 2, "of": 12, "first": [first, first.replace("(1", "(2").replace("10 to 19", "20 to 29")]}
    assert found["source"]["absent"] == absent | {"read_as": "1.5"}
    assert bigsvd.open_factors(scene.out).attributes["source"]["absent"] == found["source"]["absent"]
    exact = np.linalg.svd(values - values.mean(axis=0), compute_uv=False)[:2]
    assert np.allclose(found["singular_values"], exact, rtol=1e-9)
    agreed = run("verify", scene.out, file, "--absent", "fill", "--quiet")
    assert agreed.exit_code == 0, agreed.output
    assert run("verify", scene.out, file, "--quiet").exit_code == 2


@pytest.mark.parametrize("kept", [0, 0.5, 0.98])
@pytest.mark.parametrize("codec", [GzipCodec(), ZstdCodec(), None], ids=["gzip", "zstd", "none"])
def test_05_a_chunk_cut_short_is_named_with_sizes(scene: Scene, kept: float, codec: Any) -> None:
    file = write_zarr(scene.folder / "a.zarr", compressors=codec)
    chunk = file / "c/2/1"
    data = chunk.read_bytes()
    short = data[: int(len(data) * kept)]
    chunk.write_bytes(short)
    text = scene.refused(file)
    assert "chunk (2, 1): rows 20 to 29" in text
    assert f"key c/2/1, {len(short):,} bytes stored" in text
    assert "1,600 bytes" in text
    assert "Copy that chunk again" in text


@pytest.mark.parametrize("options", [(), ("--absent", "fill")])
def test_06_an_empty_shard_is_named(scene: Scene, options: tuple[str, ...]) -> None:
    file = write_zarr(scene.folder / "a.zarr", shards=(20, 40))
    (file / "c/1/0").write_bytes(b"")
    text = scene.refused(file, *options)
    assert "chunk (1, 0): rows 20 to 39" in text
    assert "its file is empty" in text


def test_07_a_damaged_shard_index_is_named(scene: Scene) -> None:
    file = write_zarr(scene.folder / "a.zarr", shards=(20, 40))
    flip(file / "c/1/0", -20)
    text = scene.refused(file)
    assert "chunk (1, 0): rows 20 to 39" in text
    assert "the index of the shard is damaged: the checksum is" in text


def test_08_a_flipped_bit_without_checksum_is_read_as_any_number(scene: Scene) -> None:
    file = write_zarr(scene.folder / "a.zarr", compressors=None)
    sound = scene.done(file)["singular_values"]
    # The lowest byte of a double: nothing can tell.
    flip(file / "c/2/1", 0)
    assert np.allclose(scene.done(file)["singular_values"], sound, rtol=1e-9)


@pytest.mark.parametrize(
    "codec", [GzipCodec(), ZstdCodec(checksum=True), Crc32cCodec()], ids=["gzip", "zstd checked", "crc32c"]
)
def test_09_a_flipped_bit_under_a_checksum_is_named(scene: Scene, codec: Any) -> None:
    file = write_zarr(scene.folder / "a.zarr", compressors=codec)
    flip(file / "c/2/1", 700)
    text = scene.refused(file)
    assert "holds a chunk that does not decode" in text
    assert "chunk (2, 1): rows 20 to 29" in text
    assert "Copy that chunk again from the origin of the store" in text


@pytest.mark.parametrize("fault", ["half", "empty", "missing", "nested"])
@pytest.mark.parametrize("zarr_format", [2, 3])
def test_10_metadata_cut_short_empty_or_missing_are_named(scene: Scene, fault: str, zarr_format: Any) -> None:
    file = write_zarr(scene.folder / "a.zarr", zarr_format=zarr_format)
    name = "zarr.json" if zarr_format == 3 else ".zarray"
    text = (file / name).read_text()
    (file / name).write_text({"half": text[: len(text) // 2], "nested": "[" * 100_000}.get(fault, ""))
    if fault == "missing":
        (file / name).unlink()
    said = scene.refused(file)
    if fault == "missing":
        # Of format 2 the attributes are left, which tell nothing.
        assert "is a directory without Zarr metadata (zarr.json, .zarray, .zgroup)" in said
    else:
        assert f"the Zarr metadata at {file}/{name} cannot be read" in said
        assert "Copy the store again, or restore that one file." in said


def test_11_a_shape_larger_than_the_chunks_stops(scene: Scene) -> None:
    file = write_zarr(scene.folder / "a.zarr")
    change(file / "zarr.json", shape=[100, 40])
    text = scene.refused(file)
    assert "8 of 20 chunks are absent" in text
    assert "first absent: chunk (6, 0): rows 60 to 69" in text


def test_12_a_wrong_separator_is_suggested(scene: Scene) -> None:
    file = write_zarr(scene.folder / "a.zarr", zarr_format=2)
    change(file / ".zarray", dimension_separator="/")
    for options in ((), ("--absent", "fill")):
        text = scene.refused(file, *options)
        assert "none of 12 chunks is stored under the key that the metadata give" in text
        assert "0/0 is wanted; there are 0.0, 0.1, 1.0, 1.1" in text
        assert "Correct the dimension separator" in text


def test_13_another_type_of_another_size_does_not_decode(scene: Scene) -> None:
    file = write_zarr(scene.folder / "a.zarr")
    change(file / "zarr.json", data_type="float32")
    text = scene.refused(file)
    assert "chunk (0, 0)" in text
    assert "a chunk has 800 bytes decoded" in text
    assert "more than 800 bytes" in text


def test_14_a_wrong_chunk_shape_does_not_decode(scene: Scene) -> None:
    file = write_zarr(scene.folder / "a.zarr", compressors=None)
    grid = {"name": "regular", "configuration": {"chunk_shape": [10, 25]}}
    change(file / "zarr.json", chunk_grid=grid)
    text = scene.refused(file)
    assert "chunk (0, 0): rows 0 to 9, columns 0 to 24" in text
    assert "1,600 bytes are stored as they are, a chunk has 2,000" in text


@pytest.mark.parametrize(
    ("values", "words"),
    [
        ({"codecs": [{"name": "bytes"}, {"name": "tide"}]}, "zarr says: Unknown codec: 'tide'"),
        ({"data_type": "tide"}, "not numbers but the type 'tide'"),
        ({"data_type": "variable_length_bytes"}, "not numbers but the type 'variable_length_bytes'"),
        ({"chunk_grid": {"name": "tidal"}}, "a chunk grid that is tidal"),
        ({"moon": {"must_understand": True}}, "moon"),
    ],
)
def test_15_what_is_not_known_is_named(scene: Scene, values: dict[str, Any], words: str) -> None:
    file = write_zarr(scene.folder / "a.zarr")
    change(file / "zarr.json", **values)
    text = scene.refused(file)
    assert words in text
    assert "Install the package that brings this codec" in text or "bigsvd inspect" in text


@pytest.mark.parametrize("name", ["pickle", "json2", "msgpack2", "vlen-utf8", "categorize"])
@pytest.mark.parametrize("place", ["compressor", "filters"])
def test_15_codecs_that_make_objects_are_never_decoded(scene: Scene, name: str, place: str) -> None:
    file = write_zarr(scene.folder / "a.zarr", zarr_format=2, compressors=None)
    for chunk in file.glob("[0-9]*"):
        # Decoding it would write a file.
        chunk.write_bytes(numcodecs.Pickle().encode(np.array([Trap(str(scene.folder / "sprung"))], object)))
    change(file / ".zarray", **{place: {"id": name} if place == "compressor" else [{"id": name}]})
    text = scene.refused(file)
    assert f"its codec {name} makes objects" in text
    assert "never decoded" in text
    assert not (scene.folder / "sprung").exists()


class Trap:
    """Unpickled, it writes a file."""

    def __init__(self, path: str) -> None:
        self.path = path

    def __reduce__(self) -> Any:
        return Path(self.path).write_text, ("sprung",)


@pytest.mark.parametrize("agree", [True, False])
def test_16_two_descriptions_must_agree(scene: Scene, agree: bool) -> None:
    file = write_zarr(scene.folder / "a.zarr")
    older = write_zarr(scene.folder / "b.zarr", zarr_format=2)
    shutil.copy(older / ".zarray", file / ".zarray")
    if agree:
        found = scene.done(file)
        assert "described by zarr.json; a .zarray lies beside it" in found["source"]["encoding"]
        return
    change(file / ".zarray", shape=[50, 40])
    text = scene.refused(file)
    assert "is described twice, and the shapes differ" in text
    assert "zarr.json: 60 × 40" in text
    assert ".zarray: 50 × 40" in text


def test_17_stale_consolidated_metadata_are_not_believed(scene: Scene) -> None:
    group = zarr.open_group(scene.folder / "a.zarr", mode="w", zarr_format=2)
    array = group.create_array("x", shape=(30, 40), chunks=CHUNK, dtype="f8")
    array[...] = matrix()[:30]
    zarr.consolidate_metadata(scene.folder / "a.zarr", zarr_format=2)
    grown = zarr.open_array(scene.folder / "a.zarr" / "x", mode="r+")
    grown.resize(SHAPE)
    grown[30:] = matrix()[30:]
    found = scene.done(scene.folder / "a.zarr")
    assert found["source"]["shape"] == list(SHAPE)
    exact = np.linalg.svd(matrix() - matrix().mean(axis=0), compute_uv=False)[:2]
    assert np.allclose(found["singular_values"], exact, rtol=1e-9)


def test_18_a_zip_file_cut_short_is_named(scene: Scene) -> None:
    store = zarr.storage.ZipStore(scene.folder / "a.zip", mode="w")
    array = zarr.create_array(store, shape=SHAPE, chunks=CHUNK, dtype="f8", serializer=BytesCodec())
    array[...] = matrix()
    store.close()
    whole = (scene.folder / "a.zip").read_bytes()
    (scene.folder / "a.zip").write_bytes(whole[: len(whole) // 2])
    text = scene.refused(scene.folder / "a.zip")
    assert "begins like a zip file but cannot be opened" in text
    assert f"{len(whole) // 2:,} bytes in the file" in text
    assert "Copy or download the file again." in text
