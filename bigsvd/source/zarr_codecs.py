"""The codecs of Zarr, formats 2 and 3, that are undone outside zarr-python, and what the bytes of a chunk then are.

Names and framings are those of the Zarr v3 specification and, in format 2, of numcodecs, from memory; tests hold the
result equal to what zarr-python reads.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any, TypeGuard

import numpy as np

from bigsvd.source import codecs
from bigsvd.source.codecs import Stretch

Undo = Callable[[Stretch, Stretch], Stretch]
_SHUFFLE = "shuffle"
# They make objects, some by running what stands in the chunk. Numbers need none of them.
_OBJECTS = ("pickle", "msgpack", "msgpack2", "json", "json2", "categorize", "vlen-utf8", "vlen-bytes", "vlen-array")
# Names in metadata, and the codec that they mean here.
_FORMAT_2 = {name: name for name in ("blosc", "gzip", "lz4", _SHUFFLE, "zlib", "zstd")}
_FORMAT_3 = {
    **{name: name for name in ("blosc", "crc32c", "gzip", "zstd")},
    **{f"numcodecs.{name}": name for name in _FORMAT_2},
}


def _bare(codec: Callable[[np.ndarray, np.ndarray], int]) -> Undo:
    """A codec that stores what its library makes, and nothing beside."""
    return lambda held, free: free.first(codec(held.bytes, free.bytes))


def _lz4(held: Stretch, free: Stretch) -> Stretch:
    """Undo LZ4 as numcodecs stores it: 4 bytes little-endian give the decoded size before the one block."""
    size = int.from_bytes(held.bytes[:4].tobytes(), "little")
    codecs.require_room(size, free.bytes)
    return free.first(codecs.lz4(held.bytes[4:], free.bytes))


def _crc32c(held: Stretch, free: Stretch) -> Stretch:
    """Compare the checksum, 4 bytes little-endian behind the data, and leave the data where they are."""
    return held.first(codecs.require_crc32c(held.bytes))


UNDO: dict[str, Undo] = {
    "blosc": _bare(codecs.blosc),
    "crc32c": _crc32c,
    "gzip": _bare(codecs.gunzip),
    "lz4": _lz4,
    "zlib": _bare(codecs.inflate),
    "zstd": _bare(codecs.zstd),
}


def object_codec(names: Sequence[str]) -> str:
    """The first codec that makes objects, under its name in either format; empty where there is none."""
    return next((name for name in names if str(name).removeprefix("numcodecs.") in _OBJECTS), "")


@dataclass(frozen=True)
class Codec:
    """One codec from bytes to bytes."""

    name: str
    # Size of the entries that are shuffled; 0 for other codecs.
    item: int = 0

    def undo(self, held: Stretch, free: Stretch) -> Stretch:
        """Undo it, from one stretch of bytes into another."""
        return codecs.unshuffle_bytes(held, free, self.item) if self.item else UNDO[self.name](held, free)

    def room(self, decoded: int) -> int:
        """Free bytes that it wants before what it is given: none."""
        return 0

    def shuffles(self, item: int) -> bool:
        """Whether it is the shuffle of entries of this size."""
        return self.item == item


@dataclass(frozen=True)
class ChunkLayout:
    """How the entries of a chunk became its bytes.

    Attributes
    ----------
    dtype : numpy.dtype
        Type of the stored entries, in their byte order.
    column_major : bool
    stages : tuple of Codec
        In the order in which the writer applied them.
    """

    dtype: np.dtype
    column_major: bool
    stages: tuple[Codec, ...]


def layout_2(document: dict[str, Any], dtype: np.dtype | None) -> ChunkLayout | None:
    """Layout that the metadata of format 2 describe; None where anything in them is not known here."""
    steps = [*(document.get("filters") or ()), *([document["compressor"]] if document["compressor"] else ())]
    stages = _stages([(step["id"], step) for step in steps], _FORMAT_2)
    if stages is None or not _plain(dtype) or document.get("order") not in ("C", "F"):
        return None
    return ChunkLayout(dtype, document["order"] == "F", stages)


def layout_3(steps: Sequence[dict[str, Any]], dtype: np.dtype | None) -> ChunkLayout | None:
    """Layout that the codecs of one chunk in format 3 describe; None where any of them is not known here.

    First come turns of the axes, of which the reversal is known, then ``bytes``, then codecs from bytes to bytes.
    """
    named = [(step["name"], step.get("configuration") or {}) for step in steps]
    names = [name for name, _ in named]
    if not _plain(dtype) or names.count("bytes") != 1:
        return None
    middle = names.index("bytes")
    orders = [options.get("order") for _, options in named[:middle]]
    endian = named[middle][1].get("endian", "little")
    stages = _stages(named[middle + 1 :], _FORMAT_3)
    turned = orders[0] if orders and isinstance(orders[0], list) else []
    as_it_was, reversed_ = list(range(len(turned))), list(range(len(turned)))[::-1]
    if names[:middle] not in ([], ["transpose"]) or turned not in (as_it_was, reversed_) or (orders and not turned):
        return None
    if stages is None or endian not in ("little", "big"):
        return None
    return ChunkLayout(dtype.newbyteorder("<" if endian == "little" else ">"), turned != as_it_was, stages)


def _plain(dtype: np.dtype | None) -> TypeGuard[np.dtype]:
    """Whether entries are numbers that lie in the store as they do in memory, apart from byte order."""
    return dtype is not None and dtype.kind in "biufc" and dtype.itemsize in (1, 2, 4, 8, 16)


def _stages(named: Sequence[tuple[str, dict[str, Any]]], known: dict[str, str]) -> tuple[Codec, ...] | None:
    """Codecs by the names that a format gives them; None where one is not known."""
    stages = []
    for name, options in named:
        item = options.get("elementsize", 0) if known.get(name) == _SHUFFLE else 0
        if name not in known or (known[name] == _SHUFFLE and not (isinstance(item, int) and item > 0)):
            return None
        stages.append(Codec(known[name], item))
    return tuple(stages)
