"""Packed entries decoded as they are read: bits seen as another type, missing ones masked, the others scaled."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np

from bigsvd.errors import UnsupportedMatrixError
from bigsvd.source import MatrixSpec, Packing, Source, check_complete, digest, fill_by_bands, require_rectangle

# Entries decoded at a time, so that what lies between stays in the processor.
BLOCK = 2**15
# Bytes of a block between packed and decoded: doubles, and two masks.
BLOCK_BYTES = BLOCK * (8 + 2)


def decode_packed(source: Source, *, raw: bool) -> Source:
    """Decode packed entries where the attributes of the array say how.

    Parameters
    ----------
    source : Source
    raw : bool
        Take entries as stored, whatever the attributes say.

    Returns
    -------
    Source
        The same one where there is nothing to decode.

    Raises
    ------
    UnsupportedMatrixError
        If the attributes do not say how, as when a scale is no number.
    """
    packing = source.spec.packing
    if raw or packing is None or not (packing.words or packing.problem):
        return source
    if packing.problem:
        source.close()
        raise UnsupportedMatrixError(
            f"{source.spec.name} is packed, and its attributes do not say how to decode it",
            evidence=[packing.problem],
            remedy="Correct the attribute in the file, or add --raw to take entries as they are stored.",
        )
    return PackedSource(source, packing)


class PackedSource:
    """A source whose packed entries are decoded in the buffer in which they are read.

    Parameters
    ----------
    inner : Source
        Hands out packed entries of type ``packing.stored``.
    packing : Packing
    """

    def __init__(self, inner: Source, packing: Packing) -> None:
        self.inner, self.packing = inner, packing
        self._seen: tuple[MatrixSpec, MatrixSpec] | None = None

    def __repr__(self) -> str:
        return f"PackedSource({self.inner!r})"

    @property
    def spec(self) -> MatrixSpec:
        """What is known of the decoded matrix; chunks that are found absent later are told as the inner source does."""
        inner = self.inner.spec
        if self._seen is None or self._seen[0] is not inner:
            packing = self.packing
            fingerprint = digest(inner.fingerprint, packing) if inner.fingerprint else ""
            self._seen = inner, replace(
                inner, dtype=np.dtype(packing.decoded), packing=None, decoded=packing.words, fingerprint=fingerprint,
                cautions=tuple(caution for caution in inner.cautions if caution != packing.unapplied),
                decode_bytes=inner.decode_bytes + BLOCK_BYTES,
            )  # fmt: skip
        return self._seen[1]

    def read(self, rows: tuple[int, int], columns: tuple[int, int], out: np.ndarray) -> None:
        """Read and decode the half-open rectangle rows × columns into `out`; see `Source.read`.

        A buffer in one piece first takes the packed entries at its end, where decoded ones overwrite them from the
        front: no memory of the size of a panel is needed beside it.
        """
        require_rectangle(self.spec, rows, columns, out)
        if out.size == 0:
            return
        if not out.flags.c_contiguous:
            fill_by_bands(lambda box, part: self.read(box[0], box[1], part), (rows, columns), out, self.spec.chunks[0])
            return
        flat = out.reshape(-1)
        stored = np.dtype(self.packing.stored)
        packed = flat.view(np.uint8)[flat.nbytes - flat.size * stored.itemsize :].view(stored)
        self.inner.read(rows, columns, packed.reshape(out.shape))
        decode(packed, flat, self.packing)

    def announce(self, rows: tuple[int, int], columns: tuple[int, int]) -> None:
        """Have the system fetch a rectangle that will be read soon, where the inner source can."""
        announce: Any = getattr(self.inner, "announce", None)
        if announce is not None:
            announce(rows, columns)

    def require_complete(self) -> None:
        """Look for parts that are absent; see `check_complete`."""
        check_complete(self.inner)

    def close(self) -> None:
        """Release the file."""
        self.inner.close()


def decode(packed: np.ndarray, out: np.ndarray, packing: Packing) -> None:
    """Decode a run of entries.

    Parameters
    ----------
    packed : ndarray, shape (n,), dtype ``packing.stored``
        May be the end of the memory of `out`.
    out : ndarray, shape (n,), dtype ``packing.decoded``
        Missing entries become NaN. Of single precision each is rounded once.
    packing : Packing
    """
    scaled = packing.scale != 1.0 or packing.offset != 0.0
    work = np.empty(min(BLOCK, packed.size))
    seen_type = np.dtype(packing.seen)
    with np.errstate(all="ignore"):
        for start in range(0, packed.size, BLOCK):
            seen = packed[start : start + BLOCK].view(seen_type)
            gone = _gone(seen, packing) if packing.masks else None
            part, target = work[: seen.size], out[start : start + BLOCK]
            if scaled:
                np.multiply(seen, packing.scale, out=part, dtype=np.float64, casting="unsafe")
                np.add(part, packing.offset, out=part)
            elif seen_type != target.dtype:
                np.copyto(part, seen, casting="unsafe")
            if scaled or seen_type != target.dtype:
                # All of the block was taken up before any of it is overwritten.
                np.copyto(target, part, casting="unsafe")
            if gone is not None:
                target[gone] = np.nan


def _gone(seen: np.ndarray, packing: Packing) -> np.ndarray:
    """Which packed entries stand for no value."""
    gone = np.zeros(seen.shape, bool)
    for value in packing.missing:
        gone |= seen == value
    if packing.lowest is not None:
        gone |= seen < packing.lowest
    if packing.highest is not None:
        gone |= seen > packing.highest
    return gone
