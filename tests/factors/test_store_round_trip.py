"""What goes into a store comes out of it: through bigsvd, plain Zarr, its Rust pipeline and xarray."""

import json
import math
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
import xarray
import zarr
from factor_samples import DTYPES, Sample, small_chunks

from bigsvd.errors import NonFiniteError, OptionError
from bigsvd.factors import FactorsWriter, open_factors, store_cost, vectors
from bigsvd.factors.plain import from_plain, to_plain


def same(factors, sample):
    assert factors.shape == sample.shape
    assert factors.rank == sample.rank
    assert factors.left_vectors.dtype == factors.right_vectors.dtype == sample.dtype
    np.testing.assert_array_equal(factors.left_vectors[...], sample.left.astype(sample.dtype))
    np.testing.assert_array_equal(factors.right_vectors[...], sample.right.astype(sample.dtype))
    np.testing.assert_array_equal(factors.singular_values, sample.value)
    np.testing.assert_array_equal(factors.column_mean, sample.mean)
    np.testing.assert_array_equal(factors.column_scale, sample.scale)
    for name, expected in sample.spectrum.items():
        np.testing.assert_array_equal(getattr(factors.spectrum, name), expected)
    for name, expected in sample.certificate.arrays().items():
        found = factors.certificate.arrays()[name]
        np.testing.assert_array_equal(found, expected)
        assert found.dtype == expected.dtype
    assert to_plain(factors.certificate.facts()) == to_plain(sample.certificate.facts())
    assert to_plain({name: factors.attributes[name] for name in sample.attributes}) == to_plain(sample.attributes)


@pytest.mark.parametrize("dtype", DTYPES)
@pytest.mark.parametrize("in_memory", [False, True])
def test_a_result_comes_back_as_it_was_written(tmp_path, dtype, in_memory):
    sample = Sample(dtype=dtype)
    out = None if in_memory else tmp_path / "out.zarr"
    factors = sample.write(out)
    same(factors, sample)
    assert factors.path == out
    if out:
        same(open_factors(out), sample)
        assert [path.name for path in tmp_path.iterdir()] == ["out.zarr"]


@pytest.mark.parametrize("most_files", [400, 3])
@pytest.mark.parametrize("block", [1, 7, 16, 33, 1_000])
@pytest.mark.parametrize("dtype", ["float64", "complex64"])
def test_any_block_size_gives_the_same_vectors_in_chunks_and_in_shards(tmp_path, monkeypatch, block, most_files, dtype):
    small_chunks(monkeypatch, 16, most_files)
    sample = Sample(rows=150, columns=20, dtype=dtype)
    same(sample.write(None, block=block), sample)
    same(sample.write(tmp_path / "out.zarr", block=block), sample)
    same(open_factors(tmp_path / "out.zarr"), sample)
    files = sorted(path.name for path in (tmp_path / "out.zarr/left_vectors").glob("c.*"))
    assert len(files) == (10 if most_files == 400 else 3)


@pytest.mark.parametrize("most_files", [400, 3])
def test_the_files_are_those_that_zarr_itself_writes(tmp_path, monkeypatch, most_files):
    small_chunks(monkeypatch, 16, most_files)
    sample = Sample(rows=150)
    ours = sample.write(tmp_path / "out.zarr").left_vectors
    theirs = zarr.create_array(
        tmp_path / "theirs.zarr",
        shape=ours.shape,
        dtype=ours.dtype,
        chunks=ours.chunks,
        shards=ours.shards,
        compressors=ours.compressors,
        fill_value=ours.fill_value,
        chunk_key_encoding={"name": "default", "separator": "."},
    )
    theirs[...] = sample.left
    np.testing.assert_array_equal(theirs[...], ours[...])
    names = sorted(path.name for path in (tmp_path / "theirs.zarr").glob("c.*"))
    assert names == sorted(path.name for path in (tmp_path / "out.zarr/left_vectors").glob("c.*"))
    if most_files == 400:
        # The last chunk overhangs the array: Zarr pads it with the fill value, we with zeros.
        assert all(
            (tmp_path / "theirs.zarr" / name).read_bytes() == (tmp_path / "out.zarr/left_vectors" / name).read_bytes()
            for name in names
            if name != "c.9.0"
        )


def test_the_rust_pipeline_reads_shards_and_chunks(tmp_path, monkeypatch):
    pytest.importorskip("zarrs")
    for most_files in (400, 3):
        small_chunks(monkeypatch, 16, most_files)
        sample = Sample(rows=150)
        out = tmp_path / f"{most_files}.zarr"
        sample.write(out)
        with zarr.config.set({"codec_pipeline.path": "zarrs.ZarrsCodecPipeline"}):
            array = zarr.open_group(out, mode="r")["left_vectors"]
            np.testing.assert_array_equal(array[...], sample.left)


def test_the_index_of_a_shard_ends_in_the_crc32c_of_its_bytes():
    # RFC 3720 (iSCSI), appendix B.4: CRC32C of 32 bytes of ones, 43 ab a8 62 in the order sent; from memory.
    assert vectors.shard_index([], 2)[-4:] == bytes.fromhex("43aba862")


@pytest.mark.parametrize("dtype", ["float64", "complex128"])
def test_xarray_opens_a_result_with_named_dimensions_and_no_warning(tmp_path, dtype):
    sample = Sample(dtype=dtype)
    sample.write(tmp_path / "out.zarr")
    with xarray.open_zarr(tmp_path / "out.zarr") as data:
        assert {name: data[name].dims for name in data} == {
            "left_vectors": ("row", "component"),
            "right_vectors": ("column", "component"),
            "singular_values": ("component",),
            "column_mean": ("column",),
            "column_scale": ("column",),
        }
        assert dict(data.sizes) == {"row": 60, "column": 12, "component": 5}
        np.testing.assert_array_equal(data.left_vectors.values, sample.left)
        assert data.attrs["bigsvd"]["complete"] is True
    with xarray.open_zarr(tmp_path / "out.zarr", group="spectrum") as data:
        assert data.value.dims == ("computed",)
        np.testing.assert_array_equal(data.upper.values, sample.spectrum["upper"])
    with xarray.open_datatree(tmp_path / "out.zarr", engine="zarr") as tree:
        np.testing.assert_array_equal(tree["certificate/angle_bound"].values, sample.certificate.angle_bound)


def test_every_array_is_checksummed_and_reads_as_nan_where_a_chunk_is_lost(tmp_path):
    Sample().write(tmp_path / "out.zarr")
    root = zarr.open_group(tmp_path / "out.zarr", mode="r")
    arrays = [array for _, array in root.members(max_depth=None) if isinstance(array, zarr.Array)]
    assert len(arrays) == 22
    for array in arrays:
        assert array.compressors[0].checksum
        assert array.metadata.dimension_names is not None
        assert np.isnan(array.fill_value) or array.dtype.kind not in "fc"


def test_all_metadata_is_strict_json(tmp_path):
    Sample().write(tmp_path / "out.zarr")

    def refuse(word):
        raise AssertionError(word)

    for path in (tmp_path / "out.zarr").rglob("zarr.json"):
        json.loads(path.read_text(), parse_constant=refuse)


def test_numbers_that_json_lacks_come_back():
    value = {"a": [math.nan, math.inf, -math.inf, 0.1], "b": {"number": 3}, "c": {"number": "some"}, "d": "NaN"}
    back = from_plain(json.loads(json.dumps(to_plain(value), allow_nan=False)))
    assert math.isnan(back["a"][0])
    assert back["a"][1:] == value["a"][1:]
    assert {key: back[key] for key in "bcd"} == {key: value[key] for key in "bcd"}


def test_attributes_take_numpy_values_paths_and_awkward_names(tmp_path):
    sample = Sample()
    sample.attributes = {
        "count": np.int64(3),
        "means": np.array([0.5, np.nan]),
        "path": Path("some/where"),
        "name": b"caf\xe9.h5".decode("utf-8", "surrogateescape"),
        "shape2": (1, 2),
        "type": np.dtype("float32"),
    }
    sample.write(tmp_path / "out.zarr")
    found = open_factors(tmp_path / "out.zarr").attributes
    assert found["count"] == 3
    assert found["means"][0] == 0.5
    assert found["path"] == "some/where"
    assert found["name"].encode("utf-8", "surrogateescape") == b"caf\xe9.h5"
    assert found["shape2"] == [1, 2]
    assert found["type"] == "float32"


def test_an_attribute_that_json_cannot_hold_is_named(tmp_path):
    sample = Sample()
    sample.attributes = {"plan": {"steps": [1, object()]}}
    with pytest.raises(OptionError, match=r"attributes\.plan\.steps\[1\] is a object"):
        sample.write(tmp_path / "out.zarr")
    sample.attributes = {"digest": "mine"}
    with pytest.raises(OptionError, match="the store itself writes digest"):
        sample.write(tmp_path / "out.zarr")


def test_blocks_out_of_order_or_of_the_wrong_shape_are_refused():
    sample = Sample()
    with sample.writer(None) as open_writer:
        open_writer.write_vectors("left", 0, sample.left[:10])
        for start in (0, 9, 11):
            with pytest.raises(OptionError, match="row 10 of 60 comes next"):
                open_writer.write_vectors("left", start, sample.left[start : start + 5])
        with pytest.raises(OptionError, match="row 10 of 60 comes next"):
            open_writer.write_vectors("left", 10, np.zeros((51, 5)))
        with pytest.raises(OptionError, match=r"blocks of \(rows, 5\) float64"):
            open_writer.write_vectors("left", 10, sample.left[10:20, :4])
        with pytest.raises(OptionError, match=r"blocks of \(rows, 5\) float64"):
            open_writer.write_vectors("left", 10, sample.left[10:20] * 1j)
        open_writer.write_vectors("left", 10, sample.left[10:])
        with pytest.raises(OptionError, match=r"right_vectors end at row 0 of 12"):
            open_writer.finish(**sample.parts)


def test_a_vector_that_is_not_finite_is_named_by_row_and_component():
    sample = Sample()
    sample.left[31, 2] = np.nan
    with sample.writer(None) as open_writer, pytest.raises(NonFiniteError, match="row 31 of component 2 is nan"):
        sample.fill(open_writer)


@pytest.mark.parametrize(
    ("part", "value", "message"),
    [
        ("singular_values", np.ones(4), r"singular_values has shape \(4,\)"),
        ("column_mean", np.ones(13), r"column_mean has shape \(13,\)"),
        ("column_scale", np.full(12, np.inf), "column_scale must be finite, entry 0 is inf"),
        ("singular_values", np.array([5.0, 4.0, 3.0, 2.0, -1.0]), "must descend and not be negative"),
        ("singular_values", np.array([5.0, 4.0, 4.5, 2.0, 1.0]), "must descend and not be negative"),
        ("spectrum", {"value": np.ones(5)}, "the spectrum needs value, lower"),
        ("certificate", Sample(rank=4).certificate, "not of 5 components"),
    ],
)
def test_a_part_that_does_not_fit_is_refused_and_nothing_left(tmp_path, part, value, message):
    sample = Sample()

    def write():
        with sample.writer(tmp_path / "out.zarr") as open_writer:
            sample.fill(open_writer)
            open_writer.finish(**{**sample.parts, part: value})

    with pytest.raises((OptionError, NonFiniteError), match=message):
        write()
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize(("rank", "dtype"), [(0, "f8"), (13, "f8"), (5, "i4"), (5, "f2")])
def test_a_rank_or_type_that_makes_no_result_is_refused(rank, dtype):
    with pytest.raises(OptionError):
        FactorsWriter(None, shape=(60, 12), rank=rank, dtype=np.dtype(dtype))


def test_one_by_one_is_a_result(tmp_path):
    sample = Sample(rows=3, columns=1, rank=1)
    same(sample.write(tmp_path / "out.zarr"), sample)


MEASURE = r"""
import re, sys
sys.path.insert(0, sys.argv[1])
from pathlib import Path
import numpy as np
from factor_samples import Sample
from bigsvd.factors import FactorsWriter, store_cost
Sample(rank=10, columns=12).write(Path(sys.argv[2]))
rows, small = 800_000, Sample(rows=20, columns=12, rank=10)
rng = np.random.default_rng(1)
def peak():
    return 1024 * int(re.search(r"VmHWM:\s+(\d+) kB", Path("/proc/self/status").read_text())[1])
before = peak()
with FactorsWriter(Path(sys.argv[2]), shape=(rows, 12), rank=10, dtype=np.dtype("f8"), overwrite=True) as writer:
    for start in range(0, rows, 1_000):
        writer.write_vectors("left", start, rng.standard_normal((1_000, 10)))
    writer.write_vectors("right", 0, small.right)
    writer.finish(**small.parts)
print(peak() - before, store_cost((rows, 12), 10, np.dtype("f8")).memory_bytes)
"""


@pytest.mark.skipif(not Path("/proc/self/status").exists(), reason="peak resident size is read from /proc")
def test_the_cost_bounds_the_memory_that_writing_takes(tmp_path):
    line = [sys.executable, "-c", MEASURE, str(Path(__file__).parent), str(tmp_path / "out.zarr")]
    run = subprocess.run(line, capture_output=True, text=True, check=True)
    measured, bound = (int(word) for word in run.stdout.split())
    assert 20 * 2**20 < measured <= bound < 180 * 2**20


def test_the_cost_bounds_what_is_written(tmp_path):
    sample = Sample(rows=20_000, columns=300, rank=5)
    sample.write(tmp_path / "out.zarr")
    files = [path for path in (tmp_path / "out.zarr").rglob("*") if path.is_file()]
    cost = store_cost(sample.shape, sample.rank, sample.dtype)
    assert len(files) <= cost.files
    assert sum(path.stat().st_size for path in files) <= cost.disk_bytes
