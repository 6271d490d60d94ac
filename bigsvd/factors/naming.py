"""Names of samples and features in a result: written chunk by chunk, compared with what the device gives back."""

from __future__ import annotations

import hashlib
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Protocol

import numpy as np

from bigsvd.errors import SourceError
from bigsvd.factors.layout import NAMES, NamesCost, plan_names
from bigsvd.source import showable
from bigsvd.units import show_bytes, show_count

if TYPE_CHECKING:
    import zarr

WHO = {"row_name": "samples", "column_name": "features"}
_ZSTD_LEVEL = 1


class NameBlocks(Protocol):
    """Names that can be read in blocks."""

    @property
    def count(self) -> int:
        """How many."""
        ...

    @property
    def words(self) -> str:
        """Where they stand."""
        ...

    def blocks(self) -> Iterator[list[str]]:
        """Read them in order."""
        ...


@dataclass(frozen=True)
class WrittenNames:
    """Names as they went into the store.

    Attributes
    ----------
    digest : str
        Of all of them in order, for the comparison with what is read back.
    remarks : tuple of str
        Names that occur more than once, and bytes that are no text.
    """

    digest: str
    remarks: tuple[str, ...]


class TooMuchTextError(Exception):
    """A chunk of names holds more text than was planned."""


def write_names(group: zarr.Group, name: str, names: NameBlocks) -> tuple[WrittenNames | None, str]:
    """Write the names of one side; a result without them is better than none.

    Parameters
    ----------
    group : zarr.Group
    name : str
        ``row_name`` or ``column_name``.
    names : NameBlocks

    Returns
    -------
    WrittenNames or None
        None where they cannot be had; nothing of them is then left in the store.
    str
        Why not.
    """
    from zarr.codecs import ZstdCodec

    cost = plan_names(names.count)
    array = group.create_array(
        name,
        shape=(names.count,),
        dtype=str,
        chunks=(cost.chunk,),
        compressors=ZstdCodec(level=_ZSTD_LEVEL, checksum=True),
        dimension_names=NAMES[name],
        chunk_key_encoding={"name": "default", "separator": "."},
        config={"write_empty_chunks": True},
    )
    try:
        return _fill(array, names, cost, WHO[name]), ""
    except (SourceError, TooMuchTextError) as error:
        del group[name]
        why = error.problem if isinstance(error, SourceError) else str(error)
        return None, f"names of {WHO[name]} are not in the result: {why}"


def _fill(array: zarr.Array[Any], names: NameBlocks, cost: NamesCost, who: str) -> WrittenNames:
    """Write whole chunks, and look at every name on the way."""
    hashes = np.empty(names.count, np.int64)
    digest = hashlib.sha256()
    changed = start = 0
    for chunk in _chunks(names.blocks(), cost):
        kept = [showable(name) for name in chunk]
        changed += sum(after != before for after, before in zip(kept, chunk, strict=True))
        hashes[start : start + len(kept)] = [hash(name) for name in kept]
        digest.update(digest_of(kept))
        array[start : start + len(kept)] = np.array(kept, dtype=np.dtypes.StringDType())
        start += len(kept)
    remarks = []
    hashes.sort()
    again = int(np.count_nonzero(hashes[1:] == hashes[:-1]))
    if again:
        remarks.append(
            f"names of {who} repeat: {show_count(names.count - again)} different ones for {show_count(names.count)}"
        )
    if changed:
        remarks.append(
            f"names of {who}: {show_count(changed)} {'is' if changed == 1 else 'are'} no UTF-8; their bytes are written"
            " by number, such as \\xe4"
        )
    return WrittenNames(digest.hexdigest(), tuple(remarks))


def _chunks(blocks: Iterable[list[str]], cost: NamesCost) -> Iterator[list[str]]:
    """Gather names into chunks of a planned length and a bounded size."""
    held: list[str] = []
    for block in blocks:
        held += block
        letters = sum(map(len, held))
        if letters > cost.text_bytes:
            raise TooMuchTextError(
                f"{show_count(len(held))} of them have more than {show_bytes(cost.text_bytes)} of text"
            )
        while len(held) >= cost.chunk:
            yield held[: cost.chunk]
            del held[: cost.chunk]
    if held:
        yield held


def digest_of(names: Iterable[str]) -> bytes:
    """What names contribute to the digest: their bytes, each with its length in front."""
    parts = [name.encode() for name in names]
    return b"".join(len(part).to_bytes(8, "little") + part for part in parts)


def names_digest(array: zarr.Array[Any]) -> str:
    """Digest of names as they stand in a store, chunk by chunk."""
    digest = hashlib.sha256()
    for start in range(0, array.shape[0], array.chunks[0]):
        digest.update(digest_of(map(str, np.asarray(array[start : start + array.chunks[0]]))))
    return digest.hexdigest()
