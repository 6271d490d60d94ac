"""The index of a shard: where in its file each inner chunk lies."""

from __future__ import annotations

import math
import os
from dataclasses import dataclass
from typing import Any

import numpy as np

from bigsvd.source import codecs

_ABSENT = 2**64 - 1


@dataclass(frozen=True)
class ShardIndex:
    """Place and form of the index (Zarr v3 specification, sharding codec).

    It holds two little-endian 64-bit numbers an inner chunk, offset and size, both 2⁶⁴ − 1 where it is absent.

    Attributes
    ----------
    sides : tuple of int
        Inner chunks along each axis of a shard; of a list of numbers, (1, how many).
    checked : bool
        Whether a CRC-32C stands behind it.
    at_end : bool
        Whether it is the last of the file, or the first.
    """

    sides: tuple[int, ...]
    checked: bool
    at_end: bool

    @classmethod
    def of(cls, shard: dict[str, Any], outer: tuple[int, ...], inner: tuple[int, ...]) -> ShardIndex | None:
        """Tell it from the configuration of the codec; None where it is written in a way not known here."""
        steps = [(step["name"], (step.get("configuration") or {})) for step in shard.get("index_codecs", ())]
        names = [name for name, _ in steps]
        if len(outer) == len(inner) == 1:
            outer, inner = (1, *outer), (1, *inner)
        whole = len(outer) == len(inner) and all(
            part > 0 and side % part == 0 for side, part in zip(outer, inner, strict=True)
        )
        location = shard.get("index_location", "end")
        if names not in (["bytes"], ["bytes", "crc32c"]) or not whole or location not in ("start", "end"):
            return None
        if steps[0][1].get("endian", "little") != "little":
            return None
        sides = tuple(side // part for side, part in zip(outer, inner, strict=True))
        return cls(sides, len(names) == 2, location == "end")

    @property
    def bytes(self) -> int:
        """Bytes of the index, its checksum included."""
        return 16 * math.prod(self.sides) + 4 * self.checked

    def read(self, descriptor: int, size: int) -> np.ndarray:
        """Read and check the index of a shard of so many bytes; of shape (*sides, 2)."""
        if size < self.bytes:
            raise ValueError(f"the shard has {size:,} bytes, its index alone {self.bytes:,}")
        start = size - self.bytes if self.at_end else 0
        raw = np.frombuffer(os.pread(descriptor, self.bytes, start), np.uint8)
        if raw.size < self.bytes:
            raise EOFError(f"{raw.size:,} of {self.bytes:,} bytes of the shard's index could be read")
        if self.checked:
            try:
                codecs.require_crc32c(raw)
            except ValueError as error:
                raise ValueError(f"the index of the shard is damaged: {error}") from None
        return self.table(raw)

    def table(self, raw: np.ndarray) -> np.ndarray:
        """Offsets and sizes in an index as it is stored, of shape (*sides, 2)."""
        return raw[: 16 * math.prod(self.sides)].view("<u8").reshape(*self.sides, 2)

    def place(self, table: np.ndarray, inner: tuple[int, ...], size: int) -> tuple[int, int] | None:
        """Offset and size of one inner chunk in a shard of so many bytes; None where it was never written."""
        offset, length = (int(number) for number in table[inner])
        if offset == length == _ABSENT:
            return None
        if offset + length > size:
            raise ValueError(
                f"the index puts inner chunk {inner} at bytes {offset:,} to {offset + length:,} of a shard of {size:,}"
            )
        return offset, length

    def absent(self, table: np.ndarray) -> np.ndarray:
        """Mark the inner chunks that were never written; of shape `sides`."""
        return np.asarray(np.all(table == np.uint64(_ABSENT), axis=-1))
