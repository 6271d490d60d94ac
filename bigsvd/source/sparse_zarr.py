"""Sparse matrices in groups of Zarr stores."""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from bigsvd.errors import OutsideError
from bigsvd.source.access import Access
from bigsvd.source.candidate import Candidate
from bigsvd.source.entries import decoded_type
from bigsvd.source.sparse_describe import describe_sparse, opened_layout, surroundings, with_surroundings
from bigsvd.source.sparse_layout import MOST_NUMBERS, SPARSE_MEMBERS, ArrayFacts
from bigsvd.source.sparse_source import SparseSource, new_spec
from bigsvd.source.zarr_array import ZarrSource
from bigsvd.source.zarr_layout import zarr_axes
from bigsvd.source.zarr_metadata import read_metadata
from bigsvd.source.zarr_store import METADATA, KeyStore, group_attributes, open_keys
from bigsvd.source.zarr_walk import count_absent, stored_bytes


class ZarrGroup:
    """A group of a Zarr store, as `recognise` looks at it.

    Parameters
    ----------
    keys : KeyStore
    path : str
        Of the group.
    """

    def __init__(self, keys: KeyStore, path: str) -> None:
        self.path = path
        self._keys = keys
        self._attributes = group_attributes(keys, path)
        self._root = group_attributes(keys, "")

    def has(self, name: str) -> bool:
        """Whether a node of this name lies in the group, and not behind a link out of the store."""
        return self._is_node(self.at(name))

    def root_has(self, name: str) -> bool:
        """Whether a node of this name lies at the root of the store."""
        return self._is_node(name)

    def _is_node(self, path: str) -> bool:
        try:
            return any(self._keys.size(f"{path}/{mark}") is not None for mark in METADATA)
        except OutsideError:
            return False

    def attribute(self, name: str) -> Any:
        """An attribute of the group; None where there is none."""
        return self._attributes.get(name)

    def root_attribute(self, name: str) -> Any:
        """An attribute of the root of the store."""
        return self._root.get(name)

    def facts(self, name: str) -> ArrayFacts | None:
        """What is known of an array in the group; None where the name is no array."""
        if not name or not self.has(name):
            return None
        array = read_metadata(self._keys, self.at(name))
        if array is None:
            return None
        numeric = array.dtype is not None and decoded_type(array.dtype) is not None and not array.forbidden
        stored = stored_bytes(self._keys, self.at(name))
        counted = numeric and len(array.shape) == 1 and stored is not None and min(array.shape) > 0
        return ArrayFacts(
            array.shape,
            array.dtype if numeric else None,
            array.type_words,
            array.encoding,
            stored,
            count_absent(self._keys, self.at(name), array.as_row()) if counted else None if stored is None else 0,
        )

    def numbers(self, name: str) -> list[float]:
        """A list of few numbers, read; empty where it is none."""
        facts = self.facts(name)
        size = math.prod(facts.shape) if facts is not None and len(facts.shape) == 1 else 0
        if facts is None or facts.dtype is None or facts.dtype.kind not in "iuf" or not 0 < size <= MOST_NUMBERS:
            return []
        source = ZarrSource(self._keys.path, self.at(name), one_row=True)
        out = np.empty(source.spec.shape, source.spec.dtype)
        source.read((0, 1), (0, out.shape[1]), out)
        source.close()
        found: list[float] = out[0].tolist()
        return found

    def at(self, name: str) -> str:
        """Path of a member of the group."""
        return f"{self.path}/{name}" if self.path else name


def sparse_members(keys: KeyStore, path: str, sparse_format: str | None, found: list[Candidate]) -> tuple[str, ...]:
    """List the sparse matrix that a group holds, if it does; return the names of what belongs to it."""
    described = describe_sparse(ZarrGroup(keys, path), sparse_format)
    if described is None:
        return ()
    said, layout = described
    found.append(with_surroundings(said, zarr_axes(keys, path, said.shape)))
    return layout.members if layout is not None else SPARSE_MEMBERS


def open_sparse_zarr(path: str, inside: str, access: Access) -> SparseSource | None:
    """Open the sparse matrix in a group of a Zarr store; None where it holds none.

    Raises
    ------
    UnsupportedMatrixError, DamagedSourceError
        If it holds one that cannot be read.
    """
    keys = open_keys(path, follow=access.follow_links)
    group = ZarrGroup(keys, inside)
    name = f"{path}:{inside}" if inside else path
    found = opened_layout(group, name, path, access.sparse_format)
    if found is None:
        return None
    said, layout = found
    said = with_surroundings(said, zarr_axes(keys, inside, said.shape, follow=access.follow_links))
    values = group.facts(layout.values)
    value_type = values.dtype if values is not None else layout.value_type

    def part(which: str) -> ZarrSource:
        return ZarrSource(path, group.at(which), access, one_row=True)

    stored = layout.nonzeros > 0
    assert value_type is not None, "the layout was checked"
    return SparseSource(
        layout,
        (part(layout.values) if stored else None, part(layout.indices) if stored else None, part(layout.pointers)),
        new_spec(
            layout,
            name,
            value_type,
            encoding=said.encoding,
            stored_bytes=said.stored_bytes,
            fingerprint=inside or "/",
            **surroundings(said),
        ),
    )
