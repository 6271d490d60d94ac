"""Files that somebody else made: nothing in them runs, leads away, fills the memory or speaks to the terminal."""

from __future__ import annotations

import json
import os
import re
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest
import zarr
from click.testing import Result
from fault_samples import run
from reader_samples import SHAPE, Scene, change, matrix, scenes, stage, write_hdf5, write_zarr

import bigsvd
from bigsvd.errors import SourceError

ROWS: dict[int, list[str]] = {}
HOSTILE = "a\x1b[31m\x9b2J\u202egnp.\u2066\x07\x7f\u200b"
SHOWN = "a\\x1b[31m\\x9b2J\\u202egnp.\\u2066\\x07\\x7f\\u200b"


@pytest.fixture(scope="module")
def earlier() -> Iterator[Path]:
    yield from scenes()


@pytest.fixture
def scene(earlier: Path, tmp_path: Path) -> Scene:
    """The earlier result lies in a folder of its own, beside which there is something to be led to."""
    (tmp_path / "own").mkdir()
    write_hdf5(tmp_path / "far.h5")
    (tmp_path / "far.bin").write_bytes(matrix().tobytes())
    return stage(earlier, tmp_path / "own")


def external_link(file: h5py.File, to: str = "..") -> None:
    file["frames"] = h5py.ExternalLink(f"{to}/far.h5", "/frames")


def soft_through_external(file: h5py.File, to: str = "..") -> None:
    file["all"] = h5py.ExternalLink(f"{to}/far.h5", "/")
    file["frames"] = h5py.SoftLink("/all/frames")


def virtual(file: h5py.File, to: str = "..") -> None:
    layout = h5py.VirtualLayout(SHAPE, "f8")
    layout[:] = h5py.VirtualSource(f"{to}/far.h5", "frames", SHAPE)
    file.create_virtual_dataset("frames", layout)


def external_storage(file: h5py.File, to: str = "..") -> None:
    file.create_dataset("frames", SHAPE, "f8", external=[(f"{to}/far.bin", 0, matrix().nbytes)])


AWAY = {one.__name__: one for one in (external_link, soft_through_external, virtual, external_storage)}


@pytest.mark.parametrize("way", AWAY)
def test_a_way_out_of_the_folder_is_listed_and_followed_only_when_told_so(scene: Scene, way: str) -> None:
    file = scene.folder / "a.h5"
    with h5py.File(file, "w") as opened:
        AWAY[way](opened)
    target = str(scene.folder.parent / ("far.bin" if way == "external_storage" else "far.h5"))
    listed = run("inspect", file)
    assert listed.exit_code == 0
    assert "--follow-links" in listed.stdout
    facts = {one["path"]: one for one in json.loads(run("inspect", file, "--json").stdout)["matrices"]}
    assert facts["/frames"]["outside"] == [target]
    assert not facts["/frames"]["usable"]
    text = scene.refused(file, "--matrix", "frames")
    assert target in text
    assert "outside the folder" in text
    assert "Add --follow-links if you trust whoever made the file" in text
    followed = run("inspect", file, "--follow-links")
    assert f"lies partly in {target}" in " ".join(followed.stdout.split()).replace(" " + target, " " + target)
    assert run("plan", file, "--matrix", "frames", "--follow-links", "--rank", 2).exit_code == 0
    found = scene.done(file, "--matrix", "frames", "--follow-links")
    exact = np.linalg.svd(matrix() - matrix().mean(axis=0), compute_uv=False)[:2]
    assert np.allclose(found["singular_values"], exact, rtol=1e-9)
    words = (scene.out, file, "--matrix", "frames", "--quiet")
    assert run("verify", *words).exit_code == 2
    assert run("verify", *words, "--follow-links").exit_code == 0


@pytest.mark.parametrize("way", AWAY)
def test_files_in_the_folder_and_below_are_read_without_being_told_so(scene: Scene, way: str) -> None:
    (scene.folder / "below").mkdir()
    for name in ("far.h5", "far.bin"):
        (scene.folder / "below" / name).write_bytes((scene.folder.parent / name).read_bytes())
    with h5py.File(scene.folder / "a.h5", "w") as opened:
        AWAY[way](opened, "below")
    assert scene.done(scene.folder / "a.h5", "--matrix", "frames")["source"]["shape"] == list(SHAPE)
    # A link in the folder that leads out of it is no file of the folder.
    for name in ("far.h5", "far.bin"):
        (scene.folder / "below" / name).unlink()
        (scene.folder / "below" / name).symlink_to(scene.folder.parent / name)
    assert str(scene.folder.parent / "far") in scene.refused(scene.folder / "a.h5", "--matrix", "frames")


def test_contiguous_data_behind_an_external_link_are_read_from_their_own_file(scene: Scene) -> None:
    write_hdf5(scene.folder / "other.h5", chunks=None)
    with h5py.File(scene.folder / "a.h5", "w") as opened:
        opened["padding"] = np.ones((500, 40))
        opened["frames"] = h5py.ExternalLink("other.h5", "/frames")
    source: Any = bigsvd.open_matrix(scene.folder / "a.h5", "frames")
    out = np.zeros(SHAPE)
    source.read((0, 60), (0, 40), out)
    assert (out == matrix()).all()
    # And a change of that file is noticed.
    os.utime(scene.folder / "other.h5", ns=(1, 1))
    with pytest.raises(SourceError, match=r"other.h5 changed while it was being read"):
        source.read((0, 60), (0, 40), out)


def test_a_virtual_dataset_over_one_that_leads_on_is_refused(scene: Scene) -> None:
    with h5py.File(scene.folder / "between.h5", "w") as opened:
        external_storage(opened)
    with h5py.File(scene.folder / "a.h5", "w") as opened:
        layout = h5py.VirtualLayout(SHAPE, "f8")
        layout[:] = h5py.VirtualSource("between.h5", "frames", SHAPE)
        opened.create_virtual_dataset("frames", layout)
    assert "it is put together from other files itself" in scene.refused(scene.folder / "a.h5")


@pytest.mark.parametrize("what", ["chunk", "folder", "metadata", "array"])
def test_a_symbolic_link_out_of_a_store_is_followed_only_when_told_so(scene: Scene, what: str) -> None:
    file, away = scene.folder / "a.zarr", scene.folder.parent / "away"
    zarr.create_group(file)
    write_zarr(file / "frames")
    place = file / "frames" / {"chunk": "c/2/1", "folder": "c/2", "metadata": "zarr.json", "array": ""}[what]
    place.rename(away)
    place.symlink_to(away)
    for options in ((), ("--absent", "fill"), ("--matrix", "frames")):
        text = scene.refused(file, *options)
        assert str(away) in text
        assert "--follow-links" in text
    assert "--follow-links" in run("inspect", file).stdout
    assert json.loads(run("inspect", file, "--json").stdout)["matrices"][0]["outside"] == [str(away)]
    assert scene.done(file, "--follow-links")["source"]["shape"] == list(SHAPE)


def test_a_symbolic_link_within_the_store_is_followed(scene: Scene) -> None:
    file = write_zarr(scene.folder / "a.zarr")
    (file / "c/2/1").rename(file / "kept")
    (file / "c/2/1").symlink_to(file / "kept")
    (scene.folder / "named.zarr").symlink_to(file)
    assert scene.done(scene.folder / "named.zarr")["source"]["shape"] == list(SHAPE)


def test_a_dangling_link_in_place_of_a_chunk_is_not_filled(scene: Scene) -> None:
    file = write_zarr(scene.folder / "a.zarr", fill_value=0)
    (file / "c/2/1").unlink()
    (file / "c/2/1").symlink_to(scene.folder.parent / "gone")
    assert "gone" in scene.refused(file, "--absent", "fill")


@pytest.mark.parametrize("kind", ["hdf5", "npy"])
def test_a_pipe_is_not_waited_for(scene: Scene, kind: str) -> None:
    os.mkfifo(scene.folder / "a.h5")
    assert "a pipe, a socket or a device" in scene.refused(scene.folder / "a.h5")
    file = write_zarr(scene.folder / "a.zarr")
    (file / "c/2/1").unlink()
    os.mkfifo(file / "c/2/1")
    assert "is absent" in scene.refused(file)
    (file / "zarr.json").unlink()
    os.mkfifo(file / "zarr.json")
    assert "a.zarr" in scene.refused(file)


def test_an_npy_file_of_objects_is_never_unpickled(scene: Scene) -> None:
    class Trap:
        def __reduce__(self) -> Any:
            return os.mkdir, (str(scene.folder / "sprung"),)

    np.save(scene.folder / "a.npy", np.array([[Trap(), Trap()]], object), allow_pickle=True)
    assert "not numbers but text, references or lists" in scene.refused(scene.folder / "a.npy")
    assert not (scene.folder / "sprung").exists()


# ---------------------------------------------------------------------------------------------------- sizes and depths
def grid(*sides: int) -> dict[str, Any]:
    return {"name": "regular", "configuration": {"chunk_shape": list(sides)}}


@pytest.mark.parametrize(
    ("values", "words"),
    [
        ({"chunk_grid": grid(2**40, 2**20)}, "declares chunks of"),
        ({"chunk_grid": grid(2**20, 2**12)}, "MemoryCeilingError"),
        ({"shape": [2**45, 2**45], "chunk_grid": grid(10, 20)}, "more than the 100,000,000 handled here"),
        ({"shape": [2**62, 40], "chunk_grid": grid(2**60, 40)}, "a.zarr"),
        ({"shape": [2**64, 40]}, "no array has such a shape"),
        ({"shape": [3] * 2000, "chunk_grid": grid(*[3] * 2000)}, "no array has such a shape"),
        ({"shape": [60.5, 40]}, "is no list of whole numbers"),
        ({"shape": [-60, 40]}, "contradicts itself"),
        ({"chunk_grid": grid(0, 20)}, "contradicts itself"),
        ({"shape": {"0": 60}}, "is no list of whole numbers"),
    ],
)
def test_sizes_that_metadata_claim_are_refused_before_they_are_allocated(
    scene: Scene, values: dict[str, Any], words: str
) -> None:
    file = write_zarr(scene.folder / "a.zarr")
    change(file / "zarr.json", **values)
    assert words in scene.refused(file)
    assert run("inspect", file).exit_code == 0


def test_shapes_that_an_hdf5_file_claims_are_refused_before_they_are_allocated(scene: Scene) -> None:
    with h5py.File(scene.folder / "a.h5", "w") as opened:
        opened.create_dataset("frames", (2**50, 2**12), "f8", chunks=(1, 1))
    for options in ((), ("--absent", "fill")):
        assert "more than the 100,000,000 handled here" in scene.refused(scene.folder / "a.h5", *options)
    assert run("inspect", scene.folder / "a.h5").exit_code == 0


@pytest.mark.parametrize("form", ["zarr gzip", "zarr zstd", "zarr crc32c", "hdf5 gzip"])
def test_a_chunk_that_decodes_to_more_than_declared_is_an_error_and_no_allocation(scene: Scene, form: str) -> None:
    import gzip
    import zlib

    import zstandard

    bomb = bytes(2**26)
    packed = {
        "zarr gzip": gzip.compress(bomb),
        "zarr zstd": zstandard.compress(bomb),
        "zarr crc32c": bomb[: 2**20],
        "hdf5 gzip": zlib.compress(bomb),
    }[form]
    if form == "hdf5 gzip":
        values = np.zeros((600, 400))
        file = scene.folder / "a.h5"
        with h5py.File(file, "w") as opened:
            dataset = opened.create_dataset("frames", values.shape, "f8", chunks=(300, 400), compression="gzip")
            dataset[...] = matrix()[0, 0]
            dataset.id.write_direct_chunk((300, 0), packed)
    else:
        codec = {"zarr gzip": "GzipCodec", "zarr zstd": "ZstdCodec", "zarr crc32c": "Crc32cCodec"}[form]
        file = write_zarr(scene.folder / "a.zarr", compressors=getattr(zarr.codecs, codec)())
        (file / "c/2/1").write_bytes(packed)
    text = scene.refused(file)
    assert "chunk (2, 1)" in text if form != "hdf5 gzip" else "chunk (1, 0)" in text


def test_a_zip_file_that_unpacks_to_more_than_declared_is_refused(scene: Scene) -> None:
    import zipfile

    file = write_zarr(scene.folder / "a.zarr", compressors=None)
    with zipfile.ZipFile(scene.folder / "a.zip", "w", zipfile.ZIP_DEFLATED) as packed:
        for path in sorted(path for path in file.rglob("*") if path.is_file()):
            name = path.relative_to(file).as_posix()
            packed.writestr(name, bytes(2**26) if name == "c/2/1" else path.read_bytes())
    text = scene.refused(scene.folder / "a.zip")
    assert "chunk (2, 1): rows 20 to 29" in text
    assert "key c/2/1, 67,108,864 bytes stored" in text
    assert "no codec makes so many of a chunk" in text


def test_metadata_of_a_size_that_nobody_writes_are_not_read(scene: Scene) -> None:
    file = write_zarr(scene.folder / "a.zarr")
    os.truncate(file / "zarr.json", 2**26 + 1)
    assert "67,108,865 bytes, more than the 67,108,864 read here" in scene.refused(file)


def test_deep_and_wide_stores_end(scene: Scene) -> None:
    file = scene.folder / "a.zarr"
    zarr.create_group(file)
    (file / "/".join(["g"] * 60)).mkdir(parents=True)
    (file / "loop").symlink_to(file)
    write_zarr(file / "frames")
    listed = run("inspect", file)
    assert listed.exit_code == 0
    assert "groups below 32 others are not looked into" in listed.stdout


# --------------------------------------------------------------------------------------------------------------- names
def plain(ended: Result) -> None:
    """Nothing that a terminal obeys, or that turns what is read about."""
    assert not re.search("[\x00-\x09\x0b-\x1f\x7f-\x9f\u200b-\u200f\u202a-\u202e\u2066-\u2069]", ended.output)


@pytest.mark.parametrize("kind", ["hdf5", "zarr"])
def test_names_from_a_file_are_shown_by_number_and_can_be_typed(scene: Scene, kind: str) -> None:
    file = scene.folder / ("a.h5" if kind == "hdf5" else "a.zarr")
    if kind == "hdf5":
        with h5py.File(file, "w") as opened:
            opened[HOSTILE], opened["b"] = matrix(), matrix()[:20]
            opened["gone" + HOSTILE] = h5py.SoftLink("/nowhere" + HOSTILE)
            opened["words" + HOSTILE] = np.zeros(3, [(HOSTILE, "f4")])
    else:
        zarr.create_group(file)
        write_zarr(file / HOSTILE)
        write_zarr(file / "b", matrix()[:20])
    listed = run("inspect", file)
    plain(listed)
    assert SHOWN in listed.stdout
    assert "$'" in listed.stdout
    facts = run("inspect", file, "--json")
    plain(facts)
    assert HOSTILE in {one["path"].strip("/") for one in json.loads(facts.stdout)["matrices"]}
    choice = run("plan", file)
    plain(choice)
    assert choice.exit_code == 2
    assert SHOWN in choice.stderr
    for words in (("plan",), ("plan", "--json"), ("decompose", "--out", scene.folder / "new.zarr")):
        ended = run(words[0], file, "--matrix", HOSTILE, "--rank", 2, *words[1:])
        assert ended.exit_code in (0, 3), ended.output
        plain(ended)


def test_a_word_quoted_for_the_shell_is_what_was_meant(tmp_path: Path) -> None:
    import subprocess

    from bigsvd.units import shell_word

    for word in (HOSTILE, "it's", "a b", "a\\b\x1b", "潮\x07", "$(x)\x01", "\udcff\x01"):
        ended = subprocess.run(["bash", "-c", f"printf %s {shell_word(word)}"], capture_output=True, check=True)
        assert ended.stdout == word.encode("utf-8", "surrogateescape")
