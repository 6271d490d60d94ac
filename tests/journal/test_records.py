"""Records of the journal: what was written comes back, and whatever else stands there is found out."""

from __future__ import annotations

import errno
import json
import os
import struct
import zlib
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from bigsvd.journal.record import MAGIC, DamagedRecordError, read_record, write_record

FACTS = {"waves": 3, "energy": 0.1 + 0.2, "first_bad": [7, 41], "nothing": None, "words": "Σ"}


def sample() -> dict[str, np.ndarray]:
    """Small arrays of every kind and order."""
    draw = np.random.default_rng(1)
    return {
        "products": draw.standard_normal((3, 5)),
        "triangle": np.asfortranarray(draw.standard_normal((4, 3))),
        "complex": draw.standard_normal((2, 2)) + 1j * draw.standard_normal((2, 2)),
        "ledger": np.array([0, 2**64 - 1], np.uint64),
        "flags": np.array([True, False]),
        "none": np.zeros((0, 6)),
        "one": np.float32(1.5) * np.ones(()),
    }


@pytest.fixture
def record(tmp_path: Path) -> Path:
    path = tmp_path / "sums-01-00003"
    write_record(path, FACTS, sample())
    return path


def test_facts_and_arrays_come_back_bit_for_bit(record: Path) -> None:
    facts, arrays = read_record(record)
    assert facts == FACTS
    wanted = sample()
    assert list(arrays) == list(wanted)
    for name, array in arrays.items():
        assert array.dtype == wanted[name].dtype
        assert array.shape == wanted[name].shape
        assert array.tobytes() == wanted[name].tobytes()


def test_the_order_in_memory_comes_back_since_products_round_by_it(record: Path) -> None:
    _, arrays = read_record(record)
    assert arrays["triangle"].flags.f_contiguous
    assert not arrays["triangle"].flags.c_contiguous
    assert arrays["products"].flags.c_contiguous


def test_parts_of_larger_arrays_are_written_as_they_look(tmp_path: Path) -> None:
    whole = np.arange(60.0).reshape(6, 10)
    write_record(tmp_path / "r", {}, {"strided": whole[::2, 1:9:3], "turned": whole.T})
    _, arrays = read_record(tmp_path / "r")
    np.testing.assert_array_equal(arrays["strided"], whole[::2, 1:9:3])
    np.testing.assert_array_equal(arrays["turned"], whole.T)
    assert arrays["turned"].flags.f_contiguous


def test_the_size_returned_is_the_size_on_the_device(tmp_path: Path) -> None:
    assert write_record(tmp_path / "r", FACTS, sample()) == (tmp_path / "r").stat().st_size


def test_every_changed_byte_is_found(record: Path) -> None:
    good = record.read_bytes()
    for place in range(len(good)):
        for flip in (0x01, 0x80):
            record.write_bytes(good[:place] + bytes([good[place] ^ flip]) + good[place + 1 :])
            with pytest.raises(DamagedRecordError):
                read_record(record)
    record.write_bytes(good)
    assert read_record(record)[0] == FACTS


def test_a_record_cut_anywhere_is_found(record: Path) -> None:
    good = record.read_bytes()
    for size in range(len(good)):
        record.write_bytes(good[:size])
        with pytest.raises(DamagedRecordError):
            read_record(record)


def test_bytes_behind_the_end_are_found(record: Path) -> None:
    record.write_bytes(record.read_bytes() + b"\0")
    with pytest.raises(DamagedRecordError, match="and should have"):
        read_record(record)


def forged(path: Path, header: bytes, *, length: int | None = None, checksum: int | None = None) -> Path:
    """A record whose checksum fits whatever its header says."""
    start = struct.pack("<QI", len(header) if length is None else length, checksum or zlib.crc32(header))
    path.write_bytes(MAGIC + start + header)
    return path


@pytest.mark.parametrize("length", [2**24 + 1, 2**40, 2**63, 2**64 - 1])
def test_a_header_that_claims_to_be_huge_is_not_allocated(length: int, tmp_path: Path) -> None:
    with pytest.raises(DamagedRecordError, match="header"):
        read_record(forged(tmp_path / "r", b"{}", length=length))


@pytest.mark.parametrize("shape", [[2**40], [2**62, 4], [2**63, 2**63], [10**30]])
def test_an_array_that_claims_to_be_huge_is_not_allocated(shape: list[int], tmp_path: Path) -> None:
    header = json.dumps({"facts": {}, "arrays": [["products", "<f8", shape, "C", 0]]}).encode()
    with pytest.raises(DamagedRecordError, match="should have"):
        read_record(forged(tmp_path / "r", header))


WRONG_HEADERS = {
    "no JSON": b"tide",
    "a list": b"[1, 2]",
    "no arrays": b'{"facts": {}}',
    "no facts": b'{"arrays": []}',
    "too few parts": b'{"facts": {}, "arrays": [["products", "<f8"]]}',
    "objects": b'{"facts": {}, "arrays": [["products", "|O", [0], "C", 0]]}',
    "an unknown type": b'{"facts": {}, "arrays": [["products", "tide", [0], "C", 0]]}',
    "a negative side": b'{"facts": {}, "arrays": [["a", "<f8", [-1], "C", 0], ["b", "<f8", [1], "C", 0]]}',
    "an unknown order": b'{"facts": {}, "arrays": [["products", "<f8", [0], "tide", 0]]}',
    "not text": b"\xff\xfe\x00",
}


@pytest.mark.parametrize("case", WRONG_HEADERS)
def test_a_header_of_something_else_is_damage_and_nothing_worse(case: str, tmp_path: Path) -> None:
    with pytest.raises(DamagedRecordError):
        read_record(forged(tmp_path / "r", WRONG_HEADERS[case]))


@given(st.binary(max_size=200))
def test_no_content_whatever_raises_anything_else(content: bytes) -> None:
    import tempfile

    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "r"
        for bytes_ in (content, MAGIC + content):
            path.write_bytes(bytes_)
            with pytest.raises(DamagedRecordError):
                read_record(path)


def test_what_is_no_number_is_not_written(tmp_path: Path) -> None:
    with pytest.raises(TypeError, match="numbers"):
        write_record(tmp_path / "r", {}, {"words": np.array(["a"], dtype=object)})
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("number", [errno.ENOSPC, errno.EDQUOT, errno.EFBIG, errno.EIO])
def test_a_device_that_refuses_leaves_the_record_before(
    number: int, record: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def refuse(handle: int) -> None:
        raise OSError(number, os.strerror(number))

    monkeypatch.setattr(os, "fsync", refuse)
    with pytest.raises(OSError, match=str(record)) as caught:
        write_record(record, {"waves": 4}, sample())
    assert caught.value.errno == number
    assert read_record(record)[0] == FACTS
    assert [path.name for path in record.parent.iterdir()] == [record.name]
