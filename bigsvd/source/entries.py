"""Which stored types are numbers, and the type their entries are decoded to."""

from __future__ import annotations

import numpy as np

_COMPLEX_NAMES = {("r", "i"), ("real", "imag"), ("re", "im")}


def decoded_type(stored: np.dtype) -> np.dtype | None:
    """Type in which entries of a stored type are handed out, in native byte order; None where they are no numbers.

    Long doubles become doubles: nothing later in the program computes in more. Pairs of floats
    named (r, i), (real, imag) or (re, im), in any case, are complex numbers.
    """
    if stored.names is not None:
        return _pair_type(stored)
    if stored.kind not in "biufc" or stored.subdtype is not None:
        return None
    if stored.kind in "fc" and stored.itemsize > np.dtype({"f": "f8", "c": "c16"}[stored.kind]).itemsize:
        return np.dtype({"f": "f8", "c": "c16"}[stored.kind])
    # A type built from its code alone carries no enum or other metadata.
    return np.dtype(stored.newbyteorder("=").str)


def _pair_type(stored: np.dtype) -> np.dtype | None:
    names = stored.names or ()
    if tuple(name.lower() for name in names) not in _COMPLEX_NAMES:
        return None
    parts = [stored[name] for name in names]
    if any(part.kind != "f" or part.shape for part in parts):
        return None
    return np.dtype("c8" if max(part.itemsize for part in parts) <= 4 else "c16")


def pair_view(dtype: np.dtype, names: tuple[str, ...]) -> np.dtype:
    """Type that shows a complex buffer as pairs of floats under the names they are stored with."""
    part = "f4" if dtype.itemsize == 8 else "f8"
    return np.dtype([(name, part) for name in names])


def show_type(stored: np.dtype) -> str:
    """Name a stored type for people."""
    pair = _pair_type(stored)
    if stored.names is not None and pair is not None:
        return f"{pair.name} stored as ({', '.join(stored.names)})"
    if stored.names is not None:
        return "records of " + ", ".join(stored.names[:6]) + (", …" if len(stored.names) > 6 else "")
    words = {"O": "text, references or lists", "S": "text", "U": "text", "T": "text", "M": "dates", "m": "durations"}
    if stored.kind in words:
        return words[stored.kind]
    if stored.subdtype is not None:
        return f"arrays of {stored.subdtype[0]}"
    if stored.kind == "V":
        return "opaque bytes"
    order = " big-endian" if stored.byteorder == ">" else ""
    return f"{stored.newbyteorder('=').name}{order}"


def type_caution(stored: np.dtype) -> tuple[str, ...]:
    """What a user should know about reading this type."""
    if stored.kind in "iu" and stored.itemsize == 8:
        return ("whole numbers beyond 2⁵³ in magnitude are rounded: everything is computed in double precision",)
    parts = [stored[name] for name in stored.names] if stored.names else [stored]
    limit = {"f": 8, "c": 16}
    if any(part.itemsize > limit.get(part.kind, 16) for part in parts):
        return (f"entries stored as {show_type(stored)} are read in double precision",)
    return ()
