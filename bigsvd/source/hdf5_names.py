"""Names in an HDF5 file: lists of text or numbers, categorical columns, a field of records."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from bigsvd.errors import NoMatrixError, UnsupportedMatrixError
from bigsvd.source.hdf5_file import library_errors_named, open_hdf5
from bigsvd.source.hdf5_links import require_path_inside
from bigsvd.source.home import Home
from bigsvd.source.names import MOST_CATEGORIES, MOST_CATEGORY_LETTERS, Names, Read, repeated, to_text
from bigsvd.units import shell_word, show_bytes, show_count

INDEX_FIELDS = ("index", "_index")


@dataclass(frozen=True)
class Hdf5Names:
    """Where names stand in an HDF5 file.

    Attributes
    ----------
    path, inside : str
        File and dataset.
    field : str
        Of records, which of them.
    categories : str
        Dataset of the distinct values, where `inside` holds their numbers.
    also : str
        Dataset of identifiers, which are put behind names that occur more than once.
    dates : str
        Unit, where whole numbers count time since 1970.
    follow : bool
        Whether links out of the folder are followed.
    """

    path: str
    inside: str
    field: str = ""
    categories: str = ""
    also: str = ""
    dates: str = ""
    follow: bool = False

    @contextmanager
    def opened(self) -> Iterator[Read]:
        """Open the file for reading names; see `NameStore`."""
        with library_errors_named(f"{self.path}:{self.inside}"), open_hdf5(self.path) as file:
            home = Home(self.path, follow=self.follow)
            for inside in filter(None, (self.inside, self.categories, self.also)):
                require_path_inside(file, inside, home)
            dataset = file[self.inside]
            column = dataset.fields(self.field) if self.field else dataset
            padded = _padded(dataset)

            def plain(start: int, stop: int) -> list[str]:
                values = column[start:stop]
                if values.ndim == 2:
                    # Letters side by side, as netCDF 3 keeps text.
                    values = np.ascontiguousarray(values).view(f"S{values.shape[1]}").reshape(-1)
                return to_text(values, padded=padded or dataset.ndim == 2, dates=self.dates)

            if self.categories:
                words = self._held(len(file[self.categories]))
                yield lambda start, stop: _by_code(words, dataset[start:stop])
            elif self.also:
                alone = Names(len(dataset), self.inside, replace(self, also=""))
                yield _told_apart(plain, file[self.also], repeated(alone))
            else:
                yield plain

    def values(self) -> np.ndarray | None:
        """What is stored, where that is a list of numbers; see `ValueStore`."""
        if self.field or self.categories or self.also or self.dates:
            return None
        with library_errors_named(f"{self.path}:{self.inside}"), open_hdf5(self.path) as file:
            require_path_inside(file, self.inside, Home(self.path, follow=self.follow))
            dataset = file[self.inside]
            return np.asarray(dataset[...]) if dataset.dtype.kind in "biuf" else None

    def _held(self, count: int) -> list[str]:
        """All distinct values of a categorical column, if they can be held."""
        words: list[str] = []
        letters = 0
        for block in Names(count, self.categories, Hdf5Names(self.path, self.categories, follow=self.follow)).blocks():
            letters += sum(map(len, block))
            if letters > MOST_CATEGORY_LETTERS:
                raise _refusal(self.path, self.categories, f"more than {show_bytes(letters)} of categories")
            words += block
        return words


def hdf5_names(file: Any, inside: str, home: Home) -> Names:
    """Say where the names under a path of a file are; they are not read.

    Parameters
    ----------
    file : h5py.File
    inside : str
        A list, a categorical column, a table of an AnnData file, or a field of records (``obs/index``).
    home : Home
        Of the file.

    Raises
    ------
    NoMatrixError
        If nothing is there.
    UnsupportedMatrixError
        If what is there is no list of names.
    """
    import h5py

    require_path_inside(file, inside, home)
    inside, field = _field_of(file, inside)
    thing = file.get(inside)
    if thing is None:
        raise NoMatrixError(
            f"{home.path} holds nothing under {inside}",
            remedy=f"See what it holds with: bigsvd inspect {shell_word(home.path)}",
        )
    words = inside.strip("/") + (f"/{field}" if field else "")
    store = Hdf5Names(home.path, inside, field, follow=home.follow)
    if isinstance(thing, h5py.Group):
        return _of_group(file, thing, inside, home)
    if not isinstance(thing, h5py.Dataset):
        raise _refusal(home.path, inside, "a type definition")
    if thing.dtype.names and not field:
        field = next((name for name in INDEX_FIELDS if name in thing.dtype.names), "")
        if not field:
            raise _refusal(home.path, inside, f"records of {', '.join(thing.dtype.names[:6])}: name one of these")
        return hdf5_names(file, f"{inside}/{field}", home)
    if not field and isinstance(thing.attrs.get("categories"), h5py.Reference):
        # Before AnnData 0.8: numbers, with a reference to their words.
        return _categorical(file, inside, file[thing.attrs["categories"]].name, home)
    kind = _kind(thing, field)
    if kind:
        raise _refusal(home.path, inside, kind)
    return Names(len(thing), words, store)


def _field_of(file: Any, inside: str) -> tuple[str, str]:
    """Split the field of records from the path of their dataset."""
    import h5py

    parent, _, last = inside.rstrip("/").rpartition("/")
    found = file.get(parent) if parent and inside not in file else None
    if isinstance(found, h5py.Dataset) and last in (found.dtype.names or ()):
        return parent, last
    return inside, ""


def _of_group(file: Any, group: Any, inside: str, home: Home) -> Names:
    """Names that a group stands for: a table's index, a categorical column, text with a mask."""
    import h5py

    index = attribute_text(group, "_index")
    if index and isinstance(group.get(index), (h5py.Dataset, h5py.Group)):
        return hdf5_names(file, f"{inside}/{index}", home)
    if {"codes", "categories"} <= set(group):
        return _categorical(file, f"{inside}/codes", f"{inside}/categories", home).called(inside.strip("/"))
    if {"values", "mask"} <= set(group):
        return hdf5_names(file, f"{inside}/values", home).called(inside.strip("/"))
    raise _refusal(home.path, inside, f"a group of {', '.join(list(group)[:6]) or 'nothing'}")


def _categorical(file: Any, codes: str, categories: str, home: Home) -> Names:
    require_path_inside(file, categories, home)
    numbers, distinct = file[codes], file[categories]
    if numbers.ndim != 1 or numbers.dtype.kind not in "iu":
        raise _refusal(home.path, codes, "no list of whole numbers")
    kind = _kind(distinct)
    if kind:
        raise _refusal(home.path, categories, kind)
    if len(distinct) > MOST_CATEGORIES:
        raise _refusal(
            home.path, categories, f"{show_count(len(distinct))} categories, and {show_count(MOST_CATEGORIES)} are held"
        )
    store = Hdf5Names(home.path, codes, categories=categories, follow=home.follow)
    return Names(len(numbers), codes.strip("/"), store, held=len(distinct))


def _kind(dataset: Any, field: str = "") -> str:
    """Why a dataset is no list of names; empty where it is one."""
    import h5py

    stored = dataset.dtype[field] if field else dataset.dtype
    letters = dataset.ndim == 2 and stored == np.dtype("S1") and not field
    if not letters and dataset.ndim != 1:
        return f"{dataset.ndim}-D, and a list of names has 1 axis" if dataset.ndim else "a single value"
    text = h5py.check_string_dtype(stored) is not None
    if not text and (stored.kind not in "biufSU" or stored.subdtype is not None):
        return "neither text nor numbers"
    return ""


def _padded(dataset: Any) -> bool:
    """Whether text is filled up with blanks, as Fortran does."""
    import h5py

    stored = dataset.id.get_type()
    return isinstance(stored, h5py.h5t.TypeStringID) and stored.get_strpad() == h5py.h5t.STR_SPACEPAD


def _by_code(words: list[str], codes: Any) -> list[str]:
    """Words of categories; a missing one has a number below zero."""
    return [words[code] if 0 <= code < len(words) else "" for code in codes.tolist()]


def _told_apart(read: Read, identifiers: Any, several: set[int]) -> Read:
    """Read names, and put the identifier behind those that occur more than once."""

    def told(start: int, stop: int) -> list[str]:
        other = to_text(identifiers[start:stop])
        pairs = zip(read(start, stop), other, strict=True)
        return [f"{name} ({more})" if hash(name) in several else name for name, more in pairs]

    return told


def attribute_text(thing: Any, name: str) -> str:
    """An attribute as text; empty where it is missing or no text."""
    try:
        value = thing.attrs.get(name, "")
    except (OSError, TypeError, ValueError, KeyError, RuntimeError):
        return ""
    if isinstance(value, np.ndarray) and value.size == 1:
        value = value.reshape(-1)[0]
    if isinstance(value, bytes):
        return value.decode("utf-8", "replace")
    return str(value) if isinstance(value, (str, int, np.integer)) else ""


def _refusal(path: str, inside: str, found: str) -> UnsupportedMatrixError:
    return UnsupportedMatrixError(
        f"{path}:{inside} holds no list of names: {found}",
        remedy="Name a list with one name for each row or column, or give a text file with a name a line.",
    )
