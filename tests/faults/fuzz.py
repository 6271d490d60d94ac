"""Mutate small files by the thousand and read each in a child process: nothing may hang, crash or lie.

    python tests/faults/fuzz.py 1500              # so many mutations of every kind of file
    python tests/faults/fuzz.py 100 --kind zarr   # of the kinds whose name begins so

Every mutation follows from its kind and its number, so that one that shows a fault can be made again.
"""

from __future__ import annotations

import argparse
import hashlib
import json
import os
import resource
import select
import shutil
import signal
import subprocess
import sys
import tempfile
import time
import traceback
import zlib
from collections import Counter
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import h5py
import hdf5plugin
import numpy as np
import zarr
from zarr.codecs import Crc32cCodec, GzipCodec, ZstdCodec

from bigsvd.errors import BigsvdError
from bigsvd.plan import Request, make_plan
from bigsvd.source import check_complete, open_source, survey

SHAPE, CHUNK = (24, 20), (8, 10)
# Beyond this a matrix is planned and not read: the plan must refuse it or be made in time.
MOST_READ = 64 * 2**20
# A mutation that takes longer hangs; the slowest sound ones take a hundredth of it.
PATIENCE = 20.0
ROOM = 3 * 2**30
NUMBERS = (0, 1, 2, 0x7F, 0x80, 0xFF, 0x7FFF, 0xFFFF, 2**31 - 1, 2**31, 2**32 - 1, 2**40, 2**63 - 1, 2**63, 2**64 - 1)
VALUES: tuple[Any, ...] = (
    *(None, True, -1, 0, 1, 2**31, 2**63, 2**64, 1e308, 0.5, "", "x", "../..", "/etc", "\x1b[2J\u202e", [], {}, [[]]),
    *("object", "|O", "<f4", ">i8", "|V8", [["a", "|O"]], [1], [0, 0], [2**40, 2**40], [-8, 10], [10**18] * 9),
    *({"id": "pickle"}, {"id": "json2"}, {"id": "vlen-utf8"}, {"name": "bytes"}, [{"name": "zstd"}], {"id": "zlib"}),
)


@dataclass(frozen=True)
class Kind:
    """One way to write the file, and which of its bytes a checksum guards: ``all``, ``chunks`` or ``none``."""

    write: Callable[[Path, np.ndarray], None]
    guarded: str


def hdf5(libver: str, **options: Any) -> Callable[[Path, np.ndarray], None]:
    def write(path: Path, values: np.ndarray) -> None:
        with h5py.File(path, "w", libver=libver) as file:
            group = file.create_group("night")
            group.create_dataset("frames", data=values, **options)
            group["label"] = np.arange(5)
            group.attrs["note"] = "invented"

    return write


def zarr_store(**options: Any) -> Callable[[Path, np.ndarray], None]:
    def write(path: Path, values: np.ndarray) -> None:
        array = zarr.create_array(
            path, shape=values.shape, dtype=values.dtype, **{"chunks": CHUNK, "fill_value": 0, **options}
        )
        array[...] = values

    return write


CHUNKED: dict[str, Any] = {"chunks": CHUNK}
FILTERS: dict[str, tuple[dict[str, Any], bool]] = {
    "contiguous": ({}, False),
    "no filter": (CHUNKED, False),
    "gzip": (CHUNKED | {"compression": "gzip", "shuffle": True}, True),
    "fletcher32": (CHUNKED | {"fletcher32": True}, True),
    "lz4": (CHUNKED | dict(hdf5plugin.LZ4()), False),
    "bitshuffle": (CHUNKED | dict(hdf5plugin.Bitshuffle()), False),
    "blosc": (CHUNKED | dict(hdf5plugin.Blosc()), False),
    "zstd": (CHUNKED | dict(hdf5plugin.Zstd()), False),
}
KINDS: dict[str, Kind] = {
    **{
        f"hdf5 {libver} {name}": Kind(
            hdf5(libver, **options), "none" if not checked else "all" if libver == "latest" else "chunks"
        )
        for libver in ("earliest", "latest")
        for name, (options, checked) in FILTERS.items()
    },
    "zarr 2 zlib": Kind(zarr_store(zarr_format=2, compressors=__import__("numcodecs").Zlib()), "chunks"),
    "zarr 2 blosc": Kind(zarr_store(zarr_format=2, compressors=__import__("numcodecs").Blosc()), "none"),
    "zarr 3 no codec": Kind(zarr_store(compressors=None), "none"),
    "zarr 3 gzip": Kind(zarr_store(compressors=GzipCodec()), "chunks"),
    "zarr 3 zstd checked": Kind(zarr_store(compressors=ZstdCodec(checksum=True)), "chunks"),
    "zarr 3 crc32c": Kind(zarr_store(compressors=Crc32cCodec()), "chunks"),
    "zarr 3 sharded": Kind(zarr_store(shards=(16, 20), compressors=[ZstdCodec(), Crc32cCodec()]), "chunks"),
}


def matrix() -> np.ndarray:
    """Entries that compress a little."""
    row, column = np.indices(SHAPE)
    return np.sin(row / 3.0).round(2) * (column + 1) + (row * column) % 7


def mutate(data: bytes, chance: np.random.Generator) -> bytes:
    """One to four changes of some bytes: flipped, replaced, cut out, put in, cut off, exchanged."""
    changed = bytearray(data)
    for _ in range(int(chance.integers(1, 5))):
        if not changed:
            break
        place, what = int(chance.integers(len(changed))), int(chance.integers(8))
        if what <= 2:
            changed[place] ^= 1 << int(chance.integers(8))
        elif what == 3:
            changed[place] = int(chance.choice([0, 1, 0x7F, 0x80, 0xFF]))
        elif what == 4:
            size = int(chance.choice([2, 4, 8]))
            number = NUMBERS[int(chance.integers(len(NUMBERS)))] % 256**size
            changed[place : place + size] = number.to_bytes(size, "little" if chance.random() < 0.7 else "big")
        elif what == 5:
            del changed[place : place + int(chance.integers(1, 40))]
        elif what == 6:
            changed[place:place] = chance.bytes(int(chance.integers(1, 40)))
        elif chance.random() < 0.3:
            del changed[place:]
        else:
            other = int(chance.integers(len(changed)))
            changed[place : place + 8], changed[other : other + 8] = (
                changed[other : other + 8],
                changed[place : place + 8],
            )
    return bytes(changed)


def mutate_document(text: bytes, chance: np.random.Generator) -> bytes:
    """Put another value somewhere into a JSON document, or nest it deeply."""
    document = json.loads(text)
    places = list(_places(document))
    if not places:
        return json.dumps(VALUES[int(chance.integers(len(VALUES)))]).encode()
    holder, key = places[int(chance.integers(len(places)))]
    if chance.random() < 0.1:
        del holder[key]
    else:
        value = VALUES[int(chance.integers(len(VALUES)))]
        holder[key] = [holder[key], value] if chance.random() < 0.1 else value
    if chance.random() < 0.01:
        return b"[" * 200_000
    return json.dumps(document).encode()


def _places(thing: Any) -> Iterator[tuple[Any, Any]]:
    for key, value in list(thing.items() if isinstance(thing, dict) else enumerate(thing)):
        yield thing, key
        if isinstance(value, dict | list):
            yield from _places(value)


def make(kind: str, number: int, original: Path, place: Path) -> tuple[bool, bool]:
    """Write mutation `number` of a file; returns whether a checksum guards what changed, and if only chunks did."""
    chance = np.random.default_rng([number, zlib.crc32(kind.encode())])
    guarded = KINDS[kind].guarded
    if original.is_file():
        data = original.read_bytes()
        if "contiguous" in kind or chance.random() < 0.6:
            place.write_bytes(mutate(data, chance))
            return guarded == "all", False
        with h5py.File(original) as file:
            places = [file["night/frames"].id.get_chunk_info(n) for n in range(6)]
        chunk = places[int(chance.integers(len(places)))]
        start, end = chunk.byte_offset, chunk.byte_offset + chunk.size
        body = mutate(data[start:end], chance)[: chunk.size].ljust(chunk.size, b"\0")
        place.write_bytes(data[:start] + body + data[end:])
        return guarded != "none", True
    shutil.rmtree(place, ignore_errors=True)
    shutil.copytree(original, place)
    files = sorted(path for path in place.rglob("*") if path.is_file())
    documents = [path for path in files if path.suffix == ".json" or path.name.startswith(".z")]
    chunks = [path for path in files if path not in documents]
    if chance.random() < 0.6:
        file = chunks[int(chance.integers(len(chunks)))]
        file.write_bytes(mutate(file.read_bytes(), chance))
        return guarded == "chunks", True
    file = documents[int(chance.integers(len(documents)))]
    change = mutate if chance.random() < 0.3 else mutate_document
    file.write_bytes(change(file.read_bytes(), chance))
    return False, False


def read_ours(path: Path) -> tuple[str, bytes]:
    """Survey, open, look for what is absent, plan and read: what came of it, and the entries."""
    try:
        for one in survey(path):
            assert one.line
        source = open_source(path)
        check_complete(source)
        make_plan(source.spec, Request(rank=2), ceiling=512 * 2**20, processors=2)
        if source.spec.decoded_bytes > MOST_READ:
            return "too large to read", b""
        rows, columns = source.spec.shape
        out = np.zeros((rows, columns), source.spec.dtype)
        source.read((0, rows), (0, columns), out)
        source.close()
        return "read", out.tobytes()
    except BigsvdError as error:
        # What a terminal would obey must not come through.
        return f"refused: {type(error).__name__}" if error.problem.isprintable() else "raised: not safe to show", b""


def read_library(path: Path) -> bytes | None:
    """What the format's own library reads; None where it refuses."""
    try:
        if path.is_file():
            with h5py.File(path) as file:
                found = file["night/frames"][...]
        else:
            found = np.asarray(zarr.open_array(path, mode="r")[...])
        return np.ascontiguousarray(found.astype(found.dtype.newbyteorder("="))).tobytes()
    except Exception:  # libraries raise what they like
        return None


def child(kind: str, folder: Path, first: int, last: int) -> None:
    """Read mutations one after another, and say of each what came of it."""
    resource.setrlimit(resource.RLIMIT_AS, (ROOM, ROOM))
    original, sound = folder / "original", matrix().tobytes()
    place = folder / "mutated"
    for number in range(first, last):
        guarded, chunks = make(kind, number, original, place)
        print(f"{number} begin", flush=True)
        try:
            outcome, entries = read_ours(place)
        except BaseException as error:
            where = traceback.extract_tb(error.__traceback__)[-1]
            print(
                f"{number} raised {type(error).__name__}: {error} at {where.filename}:{where.lineno}".replace("\n", " ")
            )
            continue
        if outcome != "read" or entries == sound:
            print(f"{number} {outcome if outcome != 'read' else 'same'}", flush=True)
            continue
        # Whatever comes now is the library's doing.
        print(f"{number} library", flush=True)
        library = read_library(place)
        if guarded and library != entries:
            print(f"{number} WRONG: {'the library refuses' if library is None else 'the library reads otherwise'}")
        elif chunks and library is not None and library != entries:
            print(f"{number} DIFFERS from what the library reads")
        else:
            print(f"{number} {'beyond the checksum' if guarded else 'changed unguarded'}", flush=True)
        sys.stdout.flush()


@dataclass
class Tally:
    """What came of all mutations of a kind."""

    outcomes: Counter[str] = field(default_factory=Counter)
    faults: list[str] = field(default_factory=list)


def run_kind(kind: str, count: int, first: int = 0) -> Tally:
    """Mutate one kind of file so many times, starting a new child after each crash or hang."""
    tally, number, last = Tally(), first, first + count
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        KINDS[kind].write(folder / "original", matrix())
        before = _digest(folder / "original")
        while number < last:
            number = _watch(kind, folder, number, last, tally)
        if _digest(folder / "original") != before:
            tally.faults.append(f"{kind}: the original was changed")
    return tally


def _digest(path: Path) -> str:
    files = [path] if path.is_file() else sorted(file for file in path.rglob("*") if file.is_file())
    return hashlib.sha256(b"".join(file.read_bytes() for file in files)).hexdigest()


def _watch(kind: str, folder: Path, first: int, last: int, tally: Tally) -> int:
    """Follow one child; returns the number of the mutation to go on with."""
    line = [sys.executable, __file__, "--child", kind, str(folder), str(first), str(last)]
    process = subprocess.Popen(line, stdout=subprocess.PIPE, stderr=subprocess.PIPE)
    assert process.stdout is not None
    number, stage, rest, stderr = first, "start", b"", b""
    try:
        while True:
            ready, _, _ = select.select([process.stdout], [], [], PATIENCE)
            if not ready:
                tally.faults.append(f"{kind} {number}: hangs ({stage})")
                tally.outcomes["hang"] += 1
                return number + 1
            data = os.read(process.stdout.fileno(), 65536)
            if not data:
                break
            *lines, rest = (rest + data).split(b"\n")
            for text in lines:
                said, stage = text.decode(errors="replace").split(" ", 1)
                number = int(said)
                if stage not in ("begin", "library"):
                    tally.outcomes[stage.split(" ")[0] if "raised" in stage else stage] += 1
                    if stage.startswith(("raised", "WRONG", "DIFFERS")):
                        tally.faults.append(f"{kind} {number}: {stage}")
        stderr = process.stderr.read() if process.stderr else b""
        status = process.wait()
        if status == 0:
            return last
        whose = "the library crashes" if stage == "library" else "crash"
        tally.outcomes[whose] += 1
        if stage != "library":
            tally.faults.append(f"{kind} {number}: ends by {status} ({stage}) {stderr.decode()[-600:]}")
        return number + 1
    finally:
        if process.poll() is None:
            process.send_signal(signal.SIGKILL)
            process.wait()
        process.stdout.close()
        if process.stderr:
            process.stderr.close()


def main() -> None:
    """Run many mutations and print what came of them."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("count", type=int, help="mutations of every kind")
    parser.add_argument("--kind", default="", help="only kinds whose name begins so")
    parser.add_argument("--first", type=int, default=0, help="number of the first mutation")
    asked = parser.parse_args()
    began, total, faults = time.monotonic(), 0, []
    for kind in (kind for kind in KINDS if kind.startswith(asked.kind)):
        tally = run_kind(kind, asked.count, asked.first)
        faults += tally.faults
        total += sum(tally.outcomes.values())
        print(f"{kind}: " + ", ".join(f"{name} {count}" for name, count in tally.outcomes.most_common()), flush=True)
    print(f"{total:,} mutations in {time.monotonic() - began:.0f} s; {len(faults)} faults")
    for fault in faults:
        print(fault)
    sys.exit(bool(faults))


if __name__ == "__main__":
    if sys.argv[1:2] == ["--child"]:
        child(sys.argv[2], Path(sys.argv[3]), int(sys.argv[4]), int(sys.argv[5]))
    else:
        main()
