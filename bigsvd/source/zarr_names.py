"""Names in a Zarr store: lists of text or numbers, categorical columns, tables of the AnnData layout."""

from __future__ import annotations

import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Any

import numpy as np

from bigsvd.errors import BigsvdError, DamagedSourceError, NoMatrixError, UnsupportedMatrixError
from bigsvd.source.names import MOST_CATEGORIES, Names, Read, to_text
from bigsvd.source.zarr_metadata import ZarrMetadata, read_metadata
from bigsvd.source.zarr_read import open_zarr
from bigsvd.source.zarr_store import KeyStore, group_attributes, open_keys
from bigsvd.units import shell_word, show_count

TEXT_CODEC = "vlen-utf8"
# zarr-python decodes a chunk whole, whatever size its metadata claim.
MOST_CHUNK = 2**24


@dataclass(frozen=True)
class ZarrNames:
    """Where names stand in a Zarr store.

    Attributes
    ----------
    path, inside : str
        Store and array.
    categories : str
        Array of the distinct values, where `inside` holds their numbers.
    follow : bool
        Whether links out of the store are followed.
    """

    path: str
    inside: str
    categories: str = ""
    follow: bool = False

    @contextmanager
    def opened(self) -> Iterator[Read]:
        """Open the store for reading names; see `NameStore`."""
        keys = open_keys(self.path, follow=self.follow)
        take = _reader(keys, self.inside)
        if self.categories:
            count = _listed(keys, self.categories).shape[0]
            words = to_text(_reader(keys, self.categories)(0, count))
            yield lambda start, stop: [
                words[code] if 0 <= code < len(words) else "" for code in take(start, stop).tolist()
            ]
        else:
            yield lambda start, stop: to_text(take(start, stop))

    def values(self) -> np.ndarray | None:
        """What is stored, where that is a list of numbers; see `ValueStore`."""
        keys = open_keys(self.path, follow=self.follow)
        found = _listed(keys, self.inside)
        if self.categories or found.dtype is None or found.dtype.kind not in "biuf":
            return None
        return np.asarray(_reader(keys, self.inside)(0, found.shape[0]))


def zarr_names(keys: KeyStore, inside: str, *, follow: bool = False) -> Names:
    """Say where the names under a path of a store are; they are not read.

    Parameters
    ----------
    keys : KeyStore
    inside : str
        A list, a categorical column, or a table of the AnnData layout.
    follow : bool
        Whether links out of the store are followed.

    Raises
    ------
    NoMatrixError
        If nothing is there.
    UnsupportedMatrixError
        If what is there is no list of names.
    """
    inside = inside.strip("/")
    if read_metadata(keys, inside) is not None:
        found = _listed(keys, inside)
        held = min(found.chunks[0], found.shape[0])
        return Names(found.shape[0], inside, ZarrNames(keys.path, inside, follow=follow), held=held)
    attributes = group_attributes(keys, inside)
    index = attributes.get("_index")
    if isinstance(index, str) and index.strip("/"):
        return zarr_names(keys, f"{inside}/{index}", follow=follow)
    codes, categories = f"{inside}/codes", f"{inside}/categories"
    if read_metadata(keys, codes) is not None and read_metadata(keys, categories) is not None:
        numbers, distinct = _listed(keys, codes), _listed(keys, categories)
        if numbers.dtype is None or numbers.dtype.kind not in "iu":
            raise _refusal(keys.path, codes, "no whole numbers")
        if distinct.shape[0] > MOST_CATEGORIES:
            many = f"{show_count(distinct.shape[0])} categories, and {show_count(MOST_CATEGORIES)} are held"
            raise _refusal(keys.path, categories, many)
        held = distinct.shape[0] + min(numbers.chunks[0], numbers.shape[0])
        return Names(numbers.shape[0], inside, ZarrNames(keys.path, codes, categories, follow), held=held)
    if read_metadata(keys, f"{inside}/values") is not None:
        return zarr_names(keys, f"{inside}/values", follow=follow).called(inside)
    raise NoMatrixError(
        f"{keys.path} holds no names under {inside}",
        remedy=f"See what it holds with: bigsvd inspect {shell_word(keys.path)}",
    )


def _listed(keys: KeyStore, inside: str) -> ZarrMetadata:
    """Metadata of a list of text or numbers."""
    found = read_metadata(keys, inside)
    if found is None:
        raise NoMatrixError(f"{keys.path} holds no array under {inside}", remedy="Check the path.")
    if len(found.shape) != 1:
        raise _refusal(keys.path, inside, f"{len(found.shape)}-D, and a list of names has 1 axis")
    text = found.dtype is None and found.type_words == "text"
    # Objects are text only where a codec says so; any other way to keep them can run what the writer liked.
    objects = found.dtype is not None and found.dtype.kind == "O" and found.codecs[0] == TEXT_CODEC
    if found.forbidden not in ("", TEXT_CODEC) or not (
        text or objects or (found.dtype is not None and found.dtype.kind in "biufSUMm")
    ):
        raise _refusal(keys.path, inside, f"neither text nor numbers but {found.type_words}")
    if found.chunks[0] > MOST_CHUNK:
        raise _refusal(keys.path, inside, f"chunks of {show_count(found.chunks[0])} entries, which are read whole")
    return found


def _reader(keys: KeyStore, inside: str) -> Any:
    """What reads entries from one number up to another, chunk by chunk."""
    found = _listed(keys, inside)
    try:
        array = open_zarr(keys, inside, found.zarr_format)
    except Exception as error:  # codecs and data types come from other packages and raise what they like
        raise _unreadable(keys.path, inside, error) from error
    held: dict[int, Any] = {}

    def chunk(number: int) -> Any:
        if number not in held:
            held.clear()
            held[number] = array[number * size : (number + 1) * size]
        return held[number]

    size = found.chunks[0]

    def take(start: int, stop: int) -> Any:
        try:
            with warnings.catch_warnings():
                warnings.simplefilter("ignore")
                parts = [
                    chunk(number)[max(start - number * size, 0) : stop - number * size]
                    for number in range(start // size, -(-stop // size))
                ]
        except BigsvdError:
            raise
        except Exception as error:
            raise _unreadable(keys.path, inside, error) from error
        return np.concatenate(parts)

    return take


def _unreadable(path: str, inside: str, error: Exception) -> DamagedSourceError:
    return DamagedSourceError(
        f"the names at {path}:{inside} cannot be read",
        evidence=[f"zarr says: {error}"],
        remedy="Write them again, or give a text file with a name a line.",
    )


def _refusal(path: str, inside: str, found: str) -> UnsupportedMatrixError:
    return UnsupportedMatrixError(
        f"{path}:{inside} holds no list of names: {found}",
        remedy="Name a list with one name for each row or column, or give a text file with a name a line.",
    )
