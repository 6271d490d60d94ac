"""What the metadata of a Zarr array says, format 2 and format 3 alike."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from bigsvd.errors import DamagedSourceError
from bigsvd.source.entries import show_type
from bigsvd.source.zarr_codecs import ChunkLayout, layout_2, layout_3, object_codec
from bigsvd.source.zarr_shards import ShardIndex
from bigsvd.source.zarr_store import KeyStore, read_document
from bigsvd.units import show_shape

# As many as NumPy has.
MOST_AXES = 64
_KEYS_3 = {
    *("zarr_format", "node_type", "shape", "data_type", "chunk_grid", "chunk_key_encoding", "fill_value", "codecs"),
    *("attributes", "dimension_names", "storage_transformers"),
}


@dataclass(frozen=True)
class ZarrMetadata:
    """One Zarr array, told from its metadata alone.

    Attributes
    ----------
    zarr_format : int
    shape, chunks : tuple of int
        The chunk is the unit of a stored key: of a sharded array, the shard.
    inner : tuple of int or None
        Chunk inside a shard.
    index : ShardIndex or None
        Where the places of inner chunks stand in a shard, if sharding is the only codec and written as usual.
    dtype : numpy.dtype or None
        None where numpy has no such type.
    type_words : str
    fill : object
        What an absent chunk is read as.
    prefix, separator : str
        A chunk is stored under prefix + i + separator + j …
    column_major, big_endian : bool
        Whether entries of a chunk lie in Fortran order, and with their highest byte first.
    codecs : tuple of str
    attributes : dict
    dimension_names : tuple of str or None
    layout : ChunkLayout or None
        How the entries of a chunk, or of an inner chunk, became bytes; None where not all of it is known here.
    note : str
        What is odd about it.
    forbidden : str
        A codec in it that makes objects and is never decoded.
    one_row : bool
        Whether the array has one axis and is shown with a first one of length one.
    """

    zarr_format: int
    shape: tuple[int, ...]
    chunks: tuple[int, ...]
    dtype: np.dtype | None
    type_words: str
    fill: Any
    prefix: str
    separator: str
    codecs: tuple[str, ...]
    attributes: dict[str, Any]
    inner: tuple[int, ...] | None = None
    index: ShardIndex | None = None
    column_major: bool = False
    big_endian: bool = False
    dimension_names: tuple[str | None, ...] = ()
    layout: ChunkLayout | None = None
    note: str = ""
    forbidden: str = ""
    one_row: bool = False

    def as_row(self) -> ZarrMetadata:
        """Show an array of one axis as a matrix of one row."""
        return replace(
            self,
            shape=(1, *self.shape),
            chunks=(1, *self.chunks),
            inner=None if self.inner is None else (1, *self.inner),
            one_row=True,
        )

    def key(self, coordinates: tuple[int, ...]) -> str:
        """Key of a chunk, below the array."""
        return self.prefix + self.separator.join(map(str, coordinates[int(self.one_row) :]))

    @property
    def encoding(self) -> str:
        """Chunks and codecs in words."""
        words = f"chunks {show_shape(self.inner or self.chunks)}"
        if self.inner:
            words += f" in shards {show_shape(self.chunks)}"
        words += f", {' + '.join(self.codecs) or 'no compression'}; Zarr v{self.zarr_format}"
        return f"{words}{', column order' if self.column_major else ''}{f'; {self.note}' if self.note else ''}"


def read_metadata(keys: KeyStore, path: str) -> ZarrMetadata | None:
    """Read the metadata of the array at `path` inside a store; None where there is no array.

    Raises
    ------
    DamagedSourceError
        If it is there but incomplete, contradicts itself, or v2 and v3 describe different shapes.
    """
    at = f"{path}/" if path else ""
    third, second = read_document(keys, f"{at}zarr.json"), read_document(keys, f"{at}.zarray")
    if third is not None and third.get("node_type") != "array":
        third = None
    found = None
    for document, name, parse in ((third, "zarr.json", _version_3), (second, ".zarray", _version_2)):
        if document is None:
            continue
        try:
            attributes = document.get("attributes") if parse is _version_3 else read_document(keys, f"{at}.zattrs")
            parsed = parse(document, attributes or {}, "")
            _require_sound(parsed)
        except (KeyError, TypeError, ValueError, AttributeError, IndexError) as error:
            raise DamagedSourceError(
                f"the Zarr metadata at {keys.path}/{at}{name} is incomplete or contradicts itself",
                evidence=[f"{type(error).__name__}: {error}"],
                remedy="Copy the store again, or restore that one file.",
            ) from error
        if found is None:
            found = parsed
        elif found.shape != parsed.shape:
            raise DamagedSourceError(
                f"{keys.path}/{at.rstrip('/')} is described twice, and the shapes differ",
                evidence=[f"zarr.json: {show_shape(found.shape)}", f".zarray: {show_shape(parsed.shape)}"],
                remedy="Remove the description that does not belong to the stored chunks.",
            )
        elif third is not None:
            note = "described by zarr.json; a .zarray lies beside it"
            found = _version_3(third, third.get("attributes") or {}, note)
    return found


def _sides(numbers: Any) -> tuple[int, ...]:
    """Shape or chunks as whole numbers; nothing else is taken for one."""
    if not isinstance(numbers, list) or any(not isinstance(side, int) or isinstance(side, bool) for side in numbers):
        raise ValueError(f"{show_value(numbers)} is no list of whole numbers")
    if len(numbers) > MOST_AXES or any(abs(side) >= 2**63 for side in numbers):
        raise ValueError(f"{show_value(numbers)}: no array has such a shape")
    return tuple(numbers)


def show_value(value: Any) -> str:
    """A value from a document, cut to a line."""
    text = repr(value)
    return text if len(text) <= 80 else f"{text[:77]}…"


def _require_sound(array: ZarrMetadata) -> None:
    if array.separator not in (".", "/"):
        raise ValueError(f"{show_value(array.separator)} between the numbers of a chunk")
    if not isinstance(array.attributes, dict) or not all(isinstance(name, str) for name in array.codecs):
        raise ValueError("attributes or codecs of another form")
    if any(len(sides) != len(array.shape) for sides in (array.chunks, array.inner or array.chunks)):
        raise ValueError(f"shape {array.shape} with chunks {array.chunks}")
    if any(side < 0 for side in array.shape) or any(side < 1 for side in (*array.chunks, *(array.inner or ()))):
        raise ValueError(f"shape {array.shape} with chunks {array.chunks}")


def _version_2(document: dict[str, Any], attributes: dict[str, Any], note: str) -> ZarrMetadata:
    dtype, words = _type_2(document["dtype"])
    chain = [*(document.get("filters") or ()), *([document["compressor"]] if document["compressor"] else ())]
    names = attributes.get("_ARRAY_DIMENSIONS")
    shape = _sides(document["shape"])
    return ZarrMetadata(
        zarr_format=2,
        shape=shape,
        chunks=_sides(document["chunks"]),
        dtype=dtype,
        type_words=words,
        fill=document.get("fill_value"),
        prefix="",
        separator=document.get("dimension_separator") or ".",
        codecs=tuple(_codec_words(step["id"], step) for step in chain),
        attributes=attributes,
        column_major=document.get("order") == "F" and len(shape) > 1,
        big_endian=dtype is not None and dtype.byteorder == ">",
        dimension_names=tuple(names) if isinstance(names, list) else (),
        layout=layout_2(document, dtype),
        note=note,
        forbidden=object_codec([step["id"] for step in chain]),
    )


def _version_3(document: dict[str, Any], attributes: dict[str, Any], note: str) -> ZarrMetadata:
    dtype, words = _type_3(document["data_type"])
    grid, encoding = document["chunk_grid"], document["chunk_key_encoding"]
    if grid["name"] != "regular":
        dtype, words = None, f"numbers on a chunk grid that is {grid['name']}"
        chunks = tuple(max(1, side) for side in _sides(document["shape"]))
    else:
        chunks = _sides(grid["configuration"]["chunk_shape"])
    default = encoding["name"] == "default"
    separator = (encoding.get("configuration") or {}).get("separator") or ("/" if default else ".")
    codecs = document["codecs"]
    shards = [step["configuration"] for step in codecs if step["name"] == "sharding_indexed"]
    steps = [*(shards[0]["codecs"] if shards else ()), *codecs]
    inner = _sides(shards[0]["chunk_shape"]) if shards else ()
    index = ShardIndex.of(shards[0], chunks, inner) if shards and len(codecs) == 1 else None
    # What a reader must understand is told by zarr-python, which refuses what it does not.
    known = (
        encoding["name"] in ("default", "v2")
        and grid["name"] == "regular"
        and not document.get("storage_transformers")
        and set(document) <= _KEYS_3
        and (not shards or index is not None)
    )
    return ZarrMetadata(
        zarr_format=3,
        shape=_sides(document["shape"]),
        chunks=chunks,
        dtype=dtype,
        type_words=words,
        fill=document.get("fill_value"),
        prefix=f"c{separator}" if default else "",
        separator=separator,
        codecs=tuple(
            _codec_words(step["name"], step.get("configuration") or {})
            for step in steps
            if step["name"] not in ("bytes", "sharding_indexed")
        ),
        attributes=attributes,
        inner=inner or None,
        index=index,
        column_major=any(step["name"] == "transpose" for step in steps),
        big_endian=any((step.get("configuration") or {}).get("endian") == "big" for step in steps),
        dimension_names=tuple(document.get("dimension_names") or ()),
        layout=layout_3(shards[0]["codecs"] if shards else codecs, dtype) if known else None,
        note=note,
        forbidden=object_codec([step["name"] for step in steps]),
    )


def _type_2(code: Any) -> tuple[np.dtype | None, str]:
    try:
        dtype = np.dtype([tuple(field) for field in code] if isinstance(code, list) else code)
    except (TypeError, ValueError):
        return None, f"an unknown type, {code!r}"
    return dtype, show_type(dtype)


def _type_3(code: Any) -> tuple[np.dtype | None, str]:
    name = code.get("name") if isinstance(code, dict) else code
    known = ("bool", "float16", "float32", "float64", "complex64", "complex128")
    if name in known or (isinstance(name, str) and name.lstrip("u") in ("int8", "int16", "int32", "int64")):
        return np.dtype(name), str(name)
    if name in ("string", "fixed_length_utf32", "null_terminated_bytes"):
        return None, "text"
    return None, f"the type {name!r}"


def _codec_words(name: str, options: dict[str, Any]) -> str:
    """Name a codec, with its level, and with the method inside it for those that hold several."""
    level = options.get("level", options.get("clevel"))
    words = f"{name} ({options['cname']})" if "cname" in options else name
    return f"{words} {level}" if level is not None else words
