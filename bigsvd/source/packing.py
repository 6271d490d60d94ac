"""Packed and missing entries: what the attributes of an array say of decoding them, by the CF conventions."""

from __future__ import annotations

import base64
import binascii
import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

NAMES = (
    *("scale_factor", "add_offset", "_FillValue", "missing_value"),
    *("valid_range", "valid_min", "valid_max", "_Unsigned"),
)
# Steps of the packed type by which a limit of unpacked values may miss the packed one that it was made of.
STEP = 1e-3
SHOWN = 4


@dataclass(frozen=True)
class Packing:
    """How packed entries become the numbers they stand for.

    Attributes
    ----------
    stored, seen, decoded : str
        Codes of the types: as the source hands entries out; as which their bits are taken; of the result.
    words : str
        The attributes that are applied, for people.
    names : tuple of str
        Their names.
    scale, offset : float
        The result is packed · scale + offset.
    missing : tuple of numbers
        Packed entries that stand for no value.
    lowest, highest : number or None
        Packed entries outside stand for no value.
    cautions : tuple of str
        What of the attributes could not be understood and changes nothing.
    problem : str
        Why the entries cannot be decoded, if they cannot.
    """

    stored: str
    seen: str
    decoded: str
    words: str
    names: tuple[str, ...]
    scale: float = 1.0
    offset: float = 0.0
    missing: tuple[float, ...] = ()
    lowest: float | None = None
    highest: float | None = None
    cautions: tuple[str, ...] = ()
    problem: str = ""

    @property
    def unapplied(self) -> str:
        """Caution for entries that are taken as stored."""
        return f"attributes {', '.join(self.names)} are not applied: entries are taken as stored"

    @property
    def masks(self) -> bool:
        """Whether some packed entries stand for no value."""
        return bool(self.missing) or self.lowest is not None or self.highest is not None


def find_packing(attributes: Mapping[str, Any], stored: np.dtype) -> Packing | None:
    """Read the attributes by which entries of an array are to be decoded.

    Parameters
    ----------
    attributes : mapping
        Of the array, as its format's library or JSON gives them; others than `NAMES` are not looked at.
    stored : numpy.dtype
        Type in which the source hands entries out.

    Returns
    -------
    Packing or None
        None where nothing would be another number.

    Notes
    -----
    CF conventions 1.11, sections 2.5.1 (missing data, valid range) and 8.1 (packed data), and of the NetCDF Users
    Guide, Attribute Conventions, the rules they rest on (``_Unsigned``; a valid range of the type of the unpacked
    values is about those). Bits are reinterpreted first, then packed entries are compared, then unpacked.
    """
    if not any(name in attributes for name in NAMES) or stored.kind == "b":
        return None
    return _Reader(attributes, stored).packing()


def packing_cautions(packing: Packing | None) -> tuple[str, ...]:
    """What to say of entries that are handed out as they are stored."""
    if packing is None:
        return ()
    return (*packing.cautions, *((packing.unapplied,) if packing.words or packing.problem else ()))


class _Reader:
    """Collects what the attributes of one array say."""

    def __init__(self, attributes: Mapping[str, Any], stored: np.dtype) -> None:
        self.attributes, self.stored = attributes, np.dtype(stored)
        self.applied: list[tuple[str, str]] = []
        self.cautions: list[str] = []
        self.problems: list[str] = []
        self.seen = self._seen()

    def packing(self) -> Packing | None:
        """All of it."""
        if self.stored.kind == "c":
            names = tuple(name for name in NAMES[:2] if name in self.attributes)
            words, code = "complex numbers are not decoded by attributes", self.stored.str
            if not names:
                return None
            return Packing(code, code, code, "", names, cautions=(f"{', '.join(names)}: {words}",))
        scale, offset = self._factor("scale_factor", 1.0), self._factor("add_offset", 0.0)
        if scale is not None and not float(scale):
            self.problems.append("scale_factor is 0, which makes every entry the same")
        missing = [value for name in ("_FillValue", "missing_value") for value in self._missing(name)]
        lowest, highest = self._limits(scale, offset)
        scaled = [one for one in (scale, offset) if one is not None]
        changes = any(float(one) != same for one, same in ((scale, 1.0), (offset, 0.0)) if one is not None)
        masks = bool(missing) or lowest is not None or highest is not None
        if not (changes or masks or self.seen != self.stored or self.problems or self.cautions):
            return None
        decoded = self._decoded(scaled if changes else [], masks=masks)
        shown = ", ".join(f"{name} {text}" for name, text in self.applied)
        words = f"{shown}; as {decoded.name}" if shown else ""
        return Packing(
            self.stored.str, self.seen.str, decoded.str, words,
            tuple(name for name in NAMES if name in self.attributes),
            1.0 if scale is None else float(scale), 0.0 if offset is None else float(offset),
            tuple(dict.fromkeys(missing)), lowest, highest, tuple(self.cautions), "; ".join(self.problems),
        )  # fmt: skip

    def _seen(self) -> np.dtype:
        """The type as which packed bits are taken."""
        if "_Unsigned" not in self.attributes or self.stored.kind not in "iu":
            return self.stored
        word = _text(self.attributes["_Unsigned"]).strip().lower()
        if word not in ("true", "false"):
            self.cautions.append(f"attribute _Unsigned is {word!r}, neither true nor false: it is not applied")
            return self.stored
        seen = np.dtype(f"{'u' if word == 'true' else 'i'}{self.stored.itemsize}")
        if seen != self.stored:
            self.applied.append(("_Unsigned", word))
        return seen

    def _numbers(self, name: str) -> np.ndarray | None:
        """An attribute as a list of numbers; None where there is none, or it is no number, which is said."""
        if name not in self.attributes:
            return None
        value = _numbers(self.attributes[name], base64_doubles=name == "_FillValue")
        if value is None:
            text = _text(self.attributes[name])
            self.cautions.append(f"attribute {name} is {text[:40]!r}, no number: it is not applied")
        return value

    def _factor(self, name: str, same: float) -> np.floating[Any] | np.integer[Any] | None:
        """A scale or an offset, in its own type."""
        value = self._numbers(name)
        if name in self.attributes and (value is None or value.size != 1 or not np.all(np.isfinite(value))):
            self.problems.append(f"attribute {name} is {_text(self.attributes[name])[:40]!r}, not one finite number")
            return None
        if value is None:
            return None
        if float(value[0]) != same:
            self.applied.append((name, _show(value[0])))
        found: np.floating[Any] = value[0]
        return found

    def _missing(self, name: str) -> list[float]:
        """Packed entries that stand for no value."""
        found, told = [], []
        for value in [] if (values := self._numbers(name)) is None else values:
            packed = self._packed(value)
            if packed is None:
                if not np.isnan(value):
                    kind = self.seen.name
                    self.cautions.append(f"{name} {_show(value)} is no {kind}: no entry can be equal to it")
            elif not math.isnan(packed):
                found.append(packed)
                told.append(_show_as(value, packed))
        if told:
            more = f", … {len(told)} values" if len(told) > SHOWN else ""
            self.applied.append((name, " ".join(told[:SHOWN]) + more))
        return found

    def _packed(self, value: Any) -> float | None:
        """A value as an entry of the packed type; None where it is none. Attributes have the type before _Unsigned."""
        if self.seen.kind == "f":
            with np.errstate(over="ignore"):
                return float(self.seen.type(value))
        if not np.isfinite(value) or value != int(value):
            return None
        whole, limits = int(value), np.iinfo(self.seen)
        if not limits.min <= whole <= limits.max and self.seen != self.stored:
            before = np.iinfo(self.stored)
            if before.min <= whole <= before.max:
                return int(np.array(whole, self.stored).view(self.seen))
        return whole if limits.min <= whole <= limits.max else None

    def _limits(self, scale: Any, offset: Any) -> tuple[float | None, float | None]:
        """Smallest and largest packed entry that stands for a value; None where every entry of the type does."""
        names = ("valid_range",) if "valid_range" in self.attributes else ("valid_min", "valid_max")
        pair: list[Any] = [None, None]
        for place, name in enumerate(names):
            values = self._numbers(name)
            wanted = 2 if name == "valid_range" else 1
            if values is not None and values.size != wanted:
                self.cautions.append(f"attribute {name} has {values.size} values and not {wanted}: it is not applied")
            elif values is not None:
                pair[place : place + wanted] = list(values)
        if all(limit is None or np.isnan(limit) for limit in pair):
            return None, None
        kinds = [np.asarray(limit).dtype for limit in pair if limit is not None]
        unpacked = self._of_unpacked(kinds, scale, offset)
        low, high = self._unscaled(pair, scale, offset) if unpacked else (self._limit(pair[0]), self._limit(pair[1]))
        told = " to ".join(
            "…" if limit is None else _show(limit) if unpacked else _show_as(limit, packed)
            for limit, packed in zip(pair, (low, high), strict=True)
        )
        low = None if low is None or low <= _lowest(self.seen) else low
        high = None if high is None or high >= _highest(self.seen) else high
        if self.seen.kind in "iu":
            low, high = None if low is None else math.ceil(low), None if high is None else math.floor(high)
        if low is not None or high is not None:
            self.applied.append(("valid range", f"{told}{' of unpacked values' if unpacked else ''}"))
        return low, high

    def _of_unpacked(self, kinds: list[np.dtype], scale: Any, offset: Any) -> bool:
        """Whether limits are about unpacked values: they have their type, and it is wider than that of packed ones."""
        factors = [np.asarray(one).dtype for one in (scale, offset) if one is not None]
        if not factors or self.stored.kind == "f":
            return False
        wider = max(factors, key=lambda kind: (kind.kind == "f", kind.itemsize))
        return wider.kind == "f" and all(kind == wider for kind in kinds)

    def _limit(self, value: Any) -> float | None:
        """A limit of packed entries, which were reinterpreted with them where it has their type."""
        if value is None or np.isnan(value):
            return None
        packed = self._packed(value)
        if packed is not None or self.seen.kind == "f" or not np.isfinite(value):
            return packed
        return float(value)

    def _unscaled(self, pair: list[Any], scale: Any, offset: Any) -> tuple[float | None, float | None]:
        """Limits of unpacked values in units of packed ones."""
        factor, shift = float(1.0 if scale is None else scale) or 1.0, float(0.0 if offset is None else offset)
        low, high = (None if limit is None or np.isnan(limit) else (float(limit) - shift) / factor for limit in pair)
        if factor < 0:
            low, high = high, low
        return None if low is None else low - STEP, None if high is None else high + STEP

    def _decoded(self, factors: list[Any], *, masks: bool) -> np.dtype:
        """Type of the result: that of scale and offset where they are floats, else double.

        Whole numbers of more than 16 bits are beyond the figures of single precision.
        """
        small = self.seen.itemsize <= (4 if self.seen.kind == "f" else 2)
        if factors:
            narrow = all(np.asarray(one).dtype.kind == "f" and np.asarray(one).itemsize <= 4 for one in factors)
            return np.dtype("f4" if narrow and small else "f8")
        if self.seen.kind == "f" or not masks:
            return self.seen
        return np.dtype("f4" if small else "f8")


def _text(value: Any) -> str:
    """An attribute as text."""
    if isinstance(value, np.ndarray) and value.size == 1:
        value = value.reshape(-1)[0]
    return value.decode("utf-8", "replace") if isinstance(value, bytes) else str(value)


def _numbers(value: Any, *, base64_doubles: bool) -> np.ndarray | None:
    """Numbers in an attribute, as a list in their own type; None where there are none."""
    if isinstance(value, str | bytes) or (isinstance(value, np.ndarray | np.generic) and value.dtype.kind in "SUO"):
        text = _text(value).strip()
        try:
            return np.array([float(text)])
        except ValueError:
            return _double(text) if base64_doubles else None
    try:
        found = np.atleast_1d(np.asarray(value)).reshape(-1)
    except (TypeError, ValueError):
        return None
    return found if found.size and found.dtype.kind in "iuf" else None


def _double(text: str) -> np.ndarray | None:
    """A double as the bytes of it in base 64: how xarray writes _FillValue among the attributes of a Zarr array."""
    try:
        raw = base64.b64decode(text, validate=True)
    except (binascii.Error, ValueError):
        return None
    return np.frombuffer(raw, "<f8").astype("f8") if len(raw) == 8 else None


def _show(value: Any) -> str:
    """A number in the figures of its own type."""
    text = str(value)
    return text.removesuffix(".0") if "e" not in text else text


def _show_as(value: Any, packed: float | None) -> str:
    """An attribute, and as what it is read where _Unsigned makes another number of its bits."""
    other = packed is not None and np.asarray(value).dtype.kind in "iu" and packed != value
    return f"{_show(value)} (read as {packed})" if other else _show(value)


def _lowest(dtype: np.dtype) -> float:
    return -math.inf if dtype.kind == "f" else int(np.iinfo(dtype).min)


def _highest(dtype: np.dtype) -> float:
    return math.inf if dtype.kind == "f" else int(np.iinfo(dtype).max)
