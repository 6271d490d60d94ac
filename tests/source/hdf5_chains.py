"""Chains of HDF5 filters that tests write: through h5py's low level, so that any order and any option can be had."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import h5py
import hdf5plugin
import numpy as np

Step = tuple[int, tuple[int, ...]]
GZIP: Step = (1, (4,))
SHUFFLE: Step = (2, ())
FLETCHER: Step = (3, ())
LZF: Step = (32000, ())
ZSTD: Step = (32015, (3,))
SZIP_NEAREST: Step = (4, (32, 8))
SZIP_ENTROPY: Step = (4, (4, 16))


def blosc(name: str, shuffle: int) -> Step:
    codec = ("blosclz", "lz4", "lz4hc", "snappy", "zlib", "zstd").index(name)
    return 32001, (0, 0, 0, 0, 5, shuffle, codec)


def plugin(options: Any) -> Step:
    """What hdf5plugin would give to h5py."""
    return options["compression"], tuple(options["compression_opts"])


# Decoded past the library.
CHAINS: dict[str, tuple[Step, ...]] = {
    "no filter": (),
    "gzip": (GZIP,),
    "shuffle": (SHUFFLE,),
    "shuffle gzip": (SHUFFLE, GZIP),
    "gzip shuffle": (GZIP, SHUFFLE),
    "fletcher32": (FLETCHER,),
    "shuffle gzip fletcher32": (SHUFFLE, GZIP, FLETCHER),
    "fletcher32 shuffle gzip": (FLETCHER, SHUFFLE, GZIP),
    "gzip lzf zstd": (GZIP, LZF, ZSTD),
    "gzip fletcher32 lzf": (GZIP, FLETCHER, LZF),
    "lzf": (LZF,),
    "shuffle lzf fletcher32": (SHUFFLE, LZF, FLETCHER),
    "szip nearest": (SZIP_NEAREST,),
    "szip entropy": (SZIP_ENTROPY,),
    "zstd": (ZSTD,),
    "shuffle zstd": (SHUFFLE, ZSTD),
    "lz4": (plugin(hdf5plugin.LZ4()),),
    "lz4 in small blocks": (plugin(hdf5plugin.LZ4(nbytes=1000)),),
    "shuffle lz4 fletcher32": (SHUFFLE, plugin(hdf5plugin.LZ4()), FLETCHER),
    "bitshuffle": (plugin(hdf5plugin.Bitshuffle(cname="none")),),
    "bitshuffle lz4": (plugin(hdf5plugin.Bitshuffle(cname="lz4")),),
    "bitshuffle lz4 in small blocks": (plugin(hdf5plugin.Bitshuffle(nelems=64, cname="lz4")),),
    "bitshuffle lz4 in tiny blocks": (plugin(hdf5plugin.Bitshuffle(nelems=8, cname="lz4")),),
    "bitshuffle zstd": (plugin(hdf5plugin.Bitshuffle(cname="zstd")),),
    "bitshuffle gzip": (plugin(hdf5plugin.Bitshuffle(cname="none")), GZIP),
    "bitshuffle lz4 fletcher32": (plugin(hdf5plugin.Bitshuffle(cname="lz4")), FLETCHER),
    "bitshuffle lz4 gzip": (plugin(hdf5plugin.Bitshuffle(cname="lz4")), GZIP),
    **{
        f"blosc {name} {word}": (blosc(name, shuffle),)
        for name in ("blosclz", "lz4", "lz4hc", "zlib", "zstd")
        for shuffle, word in enumerate(("bare", "shuffled", "bitshuffled"))
    },
    **{
        f"blosc2 {name} {word}": (plugin(hdf5plugin.Blosc2(cname=name, filters=shuffle)),)
        for name in ("blosclz", "lz4", "zlib", "zstd")
        for shuffle, word in enumerate(("bare", "shuffled", "bitshuffled"))
    },
}
# Left to the library.
OTHERS: dict[str, tuple[Step, ...]] = {
    "bzip2": (plugin(hdf5plugin.BZip2()),),
    "shuffle bzip2": (SHUFFLE, plugin(hdf5plugin.BZip2())),
}


def write_chain(
    path: Path, values: np.ndarray, chain: tuple[Step, ...], chunks: tuple[int, int], *, name: str = "x"
) -> str:
    """Add a dataset that is filtered by a chain to a file."""
    plist = h5py.h5p.create(h5py.h5p.DATASET_CREATE)
    plist.set_chunk(chunks)
    for number, options in chain:
        if number == 2:
            plist.set_shuffle()
        elif number == 3:
            plist.set_fletcher32()
        elif number == 4:
            plist.set_szip(*options)
        else:
            plist.set_filter(number, h5py.h5z.FLAG_OPTIONAL, options)
    with h5py.File(path, "a") as file:
        space = h5py.h5s.create_simple(values.shape)
        kind = h5py.h5t.py_create(values.dtype, logical=True)
        h5py.Dataset(h5py.h5d.create(file.id, name.encode(), kind, space, plist))[...] = values
    return str(path)


def raw_chunk(path: Path | str, place: tuple[int, int] = (0, 0), name: str = "x") -> tuple[int, bytes]:
    """Filters skipped and stored bytes of a chunk, by the library."""
    with h5py.File(path, "r") as file:
        found: tuple[int, bytes] = file[name].id.read_direct_chunk(place)
        return found
