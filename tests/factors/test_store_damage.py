"""Every kind of damage is refused, and the message names the part."""

import json
import shutil

import numpy as np
import pytest
import zarr
from factor_samples import Sample, small_chunks

from bigsvd.errors import DamagedResultError, IncompleteResultError, ResultError
from bigsvd.factors import open_factors
from bigsvd.factors.files import FolderFiles


@pytest.fixture(scope="module")
def written(tmp_path_factory):
    out = tmp_path_factory.mktemp("written") / "out.zarr"
    with pytest.MonkeyPatch.context() as monkeypatch:
        small_chunks(monkeypatch, 16)
        Sample().write(out)
    return out


@pytest.fixture
def store(written, tmp_path):
    return shutil.copytree(written, tmp_path / "out.zarr")


def edit(path, change):
    """Change a file of JSON."""
    document = json.loads(path.read_text())
    change(document)
    path.write_text(json.dumps(document))


FILES = [
    ("left_vectors/c.2.0", "left_vectors"),
    ("right_vectors/zarr.json", "right_vectors"),
    ("singular_values/c.0", "singular_values"),
    ("spectrum/cumulative_share/c.0", "spectrum/cumulative_share"),
    ("certificate/state/zarr.json", "certificate/state"),
    ("certificate/zarr.json", "certificate"),
]


@pytest.mark.parametrize("check", [True, False])
@pytest.mark.parametrize(("name", "part"), FILES)
def test_a_missing_file_is_named(store, name, part, check):
    (store / name).unlink()
    with pytest.raises(DamagedResultError, match=f"damaged: {part}: file {name} is missing"):
        open_factors(store, check=check)


@pytest.mark.parametrize("check", [True, False])
@pytest.mark.parametrize(("name", "part"), FILES)
def test_a_truncated_file_is_named_with_both_sizes(store, name, part, check):
    data = (store / name).read_bytes()
    (store / name).write_bytes(data[:-1])
    wrong = f"{part}: file {name} has {len(data) - 1:,} bytes, {len(data):,} were written"
    with pytest.raises(DamagedResultError, match=wrong):
        open_factors(store, check=check)


@pytest.mark.parametrize(("name", "part"), FILES)
def test_one_flipped_bit_is_named(store, name, part):
    data = bytearray((store / name).read_bytes())
    data[len(data) // 2] ^= 1
    (store / name).write_bytes(data)
    with pytest.raises(DamagedResultError, match=f"{part}: file {name} has its size, but not the bytes"):
        open_factors(store)


def test_every_single_file_is_under_the_manifest(store):
    names = FolderFiles(store).names()
    assert len(names) == 50
    for name in names:
        data = (store / name).read_bytes()
        (store / name).write_bytes(data[: len(data) // 2])
        with pytest.raises(DamagedResultError, match=name.replace(".", r"\.")):
            open_factors(store)
        (store / name).write_bytes(data)
    open_factors(store)


def test_a_chunk_that_is_a_folder_is_missing(store):
    (store / "left_vectors/c.1.0").unlink()
    (store / "left_vectors/c.1.0").mkdir()
    with pytest.raises(DamagedResultError, match=r"left_vectors: file left_vectors/c\.1\.0 is missing"):
        open_factors(store, check=False)


def test_two_damaged_files_are_both_told(store):
    (store / "left_vectors/c.0.0").unlink()
    (store / "right_vectors/c.0.0").unlink()
    with pytest.raises(DamagedResultError, match="and 1 more") as caught:
        open_factors(store)
    assert caught.value.evidence == ("right_vectors: file right_vectors/c.0.0 is missing",)


CHANGES = {
    "seed": lambda record: record.update(seed=4),
    "created": lambda record: record.update(created="2001-01-01T00:00:00+00:00"),
    "timings": lambda record: record["timings"].update(sweep=0.5),
    "added": lambda record: record.update(more=1),
    "removed": lambda record: record.pop("source"),
    "manifest": lambda record: record["manifest"].pop("left_vectors/c.0.0"),
    "digest": lambda record: record.update(digest="0" * 64),
    "no digest": lambda record: record.pop("digest"),
    "nan": lambda record: record.update(seed=float("nan")),
}


@pytest.mark.parametrize("change", CHANGES)
def test_changed_attributes_are_refused(store, change):
    edit(store / "zarr.json", lambda document: CHANGES[change](document["attributes"]["bigsvd"]))
    with pytest.raises(DamagedResultError, match=r"the attributes of .* were changed"):
        open_factors(store, check=False)


@pytest.mark.parametrize("complete", [False, None, "true", 1])
def test_a_store_that_does_not_say_complete_is_refused(store, complete):
    edit(store / "zarr.json", lambda document: document["attributes"]["bigsvd"].update(complete=complete))
    with pytest.raises(IncompleteResultError, match="was never finished"):
        open_factors(store)


def test_a_store_whose_complete_mark_was_removed_is_refused(store):
    edit(store / "zarr.json", lambda document: document["attributes"]["bigsvd"].pop("complete"))
    with pytest.raises(IncompleteResultError):
        open_factors(store)


def test_a_partial_store_is_refused_by_its_name(store):
    shutil.copytree(store, store.with_name("out.zarr.partial"))
    with pytest.raises(IncompleteResultError, match="a run writes it, or died while it did"):
        open_factors(store.with_name("out.zarr.partial"))


@pytest.mark.parametrize("number", [2, 99, "one", None])
def test_a_newer_format_is_refused_and_numbered(store, number):
    edit(store / "zarr.json", lambda document: document["attributes"]["bigsvd"].update(format=number))
    with pytest.raises(ResultError, match=f"has result format {number}, this version of bigsvd reads up to format 1"):
        open_factors(store)


def test_the_copy_of_metadata_in_the_root_must_agree(store):
    def lie(document):
        document["consolidated_metadata"]["metadata"]["left_vectors"]["data_type"] = "int64"

    edit(store / "zarr.json", lie)
    with pytest.raises(DamagedResultError, match="left_vectors: the copy of its metadata"):
        open_factors(store)


@pytest.mark.parametrize("text", ["", "{", "[]", "null", '{"attributes": []}', "\0" * 100])
def test_unreadable_root_metadata_is_named(store, text):
    (store / "zarr.json").write_text(text)
    with pytest.raises(DamagedResultError, match="the root metadata of") as caught:
        open_factors(store)
    assert caught.value.evidence[0] == "file: zarr.json"


def test_missing_root_metadata_is_named(store):
    (store / "zarr.json").unlink()
    with pytest.raises(DamagedResultError, match=r"the root metadata of .* cannot be read"):
        open_factors(store)


def test_what_is_no_result_is_refused(tmp_path):
    with pytest.raises(ResultError, match=r"none\.zarr does not exist"):
        open_factors(tmp_path / "none.zarr")
    (tmp_path / "file.zarr").write_text("text")
    with pytest.raises(ResultError, match="is a file, not a result folder"):
        open_factors(tmp_path / "file.zarr")
    (tmp_path / "folder").mkdir()
    with pytest.raises(ResultError, match=r"is not a bigsvd result: it has no zarr\.json"):
        open_factors(tmp_path / "folder")
    zarr.create_group(tmp_path / "other.zarr", zarr_format=3, attributes={"mine": 1})
    with pytest.raises(ResultError, match="is a Zarr store, but not a bigsvd result"):
        open_factors(tmp_path / "other.zarr")


def test_attributes_of_other_names_belong_to_the_user(store):
    zarr.open_group(store, mode="r+").attrs["note"] = "looked at on Monday"
    assert open_factors(store).attributes["seed"] == 3


def test_a_copied_and_moved_store_opens(store, tmp_path):
    shutil.copytree(store, tmp_path / "copy with spaces ä.zarr")
    shutil.rmtree(store)
    factors = open_factors(str(tmp_path / "copy with spaces ä.zarr"))
    np.testing.assert_array_equal(factors.left_vectors[...], Sample().left)
