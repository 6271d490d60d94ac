"""The features that weigh most in each component, by their names."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    import zarr

Weighted = tuple[str, float]


def strongest_features(
    vectors: zarr.Array[Any], names: zarr.Array[Any] | None, count: int
) -> list[list[Weighted]] | None:
    """Find the entries of largest modulus in each right vector.

    Parameters
    ----------
    vectors : zarr.Array, shape (n, k)
    names : zarr.Array, shape (n,), or None
    count : int
        Features of each component.

    Returns
    -------
    list of list of (str, float), or None
        By component, the strongest first, of equal ones the first; of complex entries the moduli. None without names.

    Notes
    -----
    Cost: one read of V; one chunk of it and count·k entries held.
    """
    if names is None:
        return None
    rows = np.empty((0, vectors.shape[1]), np.int64)
    entries = np.empty((0, vectors.shape[1]), vectors.dtype)
    for start in range(0, vectors.shape[0], vectors.chunks[0]):
        block = np.asarray(vectors[start : start + vectors.chunks[0]])
        numbers = np.broadcast_to(np.arange(start, start + len(block))[:, None], block.shape)
        rows, entries = np.concatenate([rows, numbers]), np.concatenate([entries, block])
        order = np.argsort(-np.abs(entries), axis=0, kind="stable")[:count]
        rows, entries = (np.take_along_axis(part, order, axis=0) for part in (rows, entries))
    called = _some(names, np.unique(rows))
    values = np.abs(entries) if entries.dtype.kind == "c" else entries
    return [
        [(called[row], value) for row, value in zip(rows[:, i].tolist(), values[:, i].tolist(), strict=True)]
        for i in range(vectors.shape[1])
    ]


def _some(names: zarr.Array[Any], rows: np.ndarray) -> dict[int, str]:
    """Names of a few features, each chunk that holds one read once."""
    size, found = names.chunks[0], {}
    for chunk in np.unique(rows // size).tolist():
        held = np.asarray(names[chunk * size : (chunk + 1) * size])
        for row in rows[rows // size == chunk].tolist():
            found[row] = str(held[row - chunk * size])
    return found
