"""The filters of HDF5: how each is undone outside the library, and in which framing its bytes stand in a chunk.

A chunk is what the filters made of it, one after another; they are undone in reverse. Framings are those of the HDF5
source (H5Zdeflate.c, H5Zfletcher32.c, H5Zshuffle.c, H5Zszip.c) and of the pages of registered filters (The HDF Group,
"Registered Filter Plugins"), written from memory and held equal to the library's own reading by tests.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np

from bigsvd.source import codecs
from bigsvd.source.bitshuffle import bitshuffle, table_room
from bigsvd.source.blosc2 import blosc2
from bigsvd.source.codecs import Stretch

Options = tuple[int, ...]
Undo = Callable[[Stretch, Stretch, Options], Stretch]
SHUFFLE = 2

NAMES = {
    1: "gzip",
    2: "shuffle",
    3: "fletcher32",
    4: "szip",
    5: "nbit",
    6: "scale-offset",
    307: "bzip2",
    32000: "lzf",
    32001: "blosc",
    32004: "lz4",
    32008: "bitshuffle",
    32013: "zfp",
    32015: "zstd",
    32017: "sz",
    32024: "sz3",
    32026: "blosc2",
    32028: "sperr",
}


def _bare(codec: Callable[[np.ndarray, np.ndarray], int]) -> Undo:
    """A filter that stores what its codec makes, and nothing beside."""
    return lambda held, free, options: free.first(codec(held.bytes, free.bytes))


def _unshuffle(held: Stretch, free: Stretch, options: Options) -> Stretch:
    """Undo a shuffle that was not the first filter, or of other entries. Options: size of an entry."""
    return codecs.unshuffle_bytes(held, free, options[0] if options else 1)


def _fletcher32(held: Stretch, free: Stretch, options: Options) -> Stretch:
    """Compare the checksum, 4 bytes little-endian behind the data, and leave the data where they are.

    Files written before HDF5 1.6.3 on little-endian machines hold it with the bytes of each half exchanged; the
    library accepts both.
    """
    from imagecodecs import h5checksum_fletcher32

    if held.size < 5:
        raise ValueError(f"{held.size} bytes, too few for data and their checksum")
    data = held.first(held.size - 4)
    written = held.bytes[-4:].tobytes()
    found = int(h5checksum_fletcher32(data.bytes)).to_bytes(4, "little")
    if written not in (found, bytes(found[place] for place in (1, 0, 3, 2))):
        raise ValueError(f"the checksum is {found.hex()}, {written.hex()} was written")
    return data


def _szip(held: Stretch, free: Stretch, options: Options) -> Stretch:
    """Undo SZIP (extended Golomb-Rice coding, CCSDS 121.0-B): 4 bytes little-endian give the decoded size before it.

    Options: mask, pixels per block, bits per pixel, pixels per scan line. Where blocks do not fit into scan lines the
    coder fills these up, and, as in the library itself, a stream that ends early decodes to zeros unnoticed.
    """
    from imagecodecs import szip_decode

    stored = held.bytes
    if stored.size < 5:
        raise ValueError(f"{stored.size} bytes, too few for SZIP")
    size = int.from_bytes(stored[:4].tobytes(), "little")
    codecs.require_room(size, free.bytes)
    return free.first(len(szip_decode(stored[4:], *options[:4], out=free.first(size).bytes)))


def _lz4(held: Stretch, free: Stretch, options: Options) -> Stretch:
    """Undo LZ4: big-endian, 8 bytes give the decoded size and 4 the size of a block; each block has 4 bytes before it.

    A block whose stored size equals its decoded size is stored as it is. The decoder checks every size against both
    buffers.
    """
    from imagecodecs import lz4h5_decode

    return free.first(len(lz4h5_decode(held.bytes, out=free.bytes)))


UNDO: dict[int, Undo] = {
    1: _bare(codecs.inflate),
    SHUFFLE: _unshuffle,
    3: _fletcher32,
    4: _szip,
    32000: _bare(codecs.lzf),
    32001: _bare(codecs.blosc),
    32004: _lz4,
    32008: bitshuffle,
    32015: _bare(codecs.zstd),
    32026: blosc2,
}


@dataclass(frozen=True)
class Filter:
    """One filter of a dataset."""

    number: int
    name: str
    options: Options

    @property
    def known(self) -> bool:
        """Whether it can be undone here."""
        return self.number in UNDO

    def undo(self, held: Stretch, free: Stretch) -> Stretch:
        """Undo it, from one stretch of bytes into another."""
        return UNDO[self.number](held, free, self.options)

    def room(self, decoded: int) -> int:
        """Free bytes that it wants before what it is given, for a chunk of so many bytes."""
        return table_room(decoded, self.options) if self.number == 32008 else 0

    def shuffles(self, item: int) -> bool:
        """Whether it is the shuffle of entries of this size."""
        return self.number == SHUFFLE and self.options[:1] == (item,)


def filters_of(dataset: Any) -> tuple[Filter, ...]:
    """Filters of a dataset in the order in which the writer applied them."""
    plist = dataset.id.get_create_plist()
    chain = []
    for position in range(plist.get_nfilters()):
        number, _, options, name = plist.get_filter(position)
        label = name.decode("utf-8", "replace").rstrip("\0").split(";")[0].strip()
        chain.append(Filter(number, NAMES.get(number, label or "unnamed filter"), tuple(options)))
    return tuple(chain)
