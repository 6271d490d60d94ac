"""Whether a result still agrees with itself and with its matrix, check by check."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Protocol

from bigsvd.certify import SliceCheck
from bigsvd.report.layout import labelled, table
from bigsvd.report.numbers import show_figures
from bigsvd.report.plain import Json, plain
from bigsvd.report.summary import slice_words
from bigsvd.units import show_bytes, show_seconds


class Checked(Protocol):
    """One thing that was checked."""

    @property
    def name(self) -> str:
        """What it is."""
        ...

    @property
    def found(self) -> float:
        """How large the difference is."""
        ...

    @property
    def allowed(self) -> float:
        """How large it may be."""
        ...

    @property
    def ok(self) -> bool:
        """Whether it holds."""
        ...


class Verified(Protocol):
    """What a verification offers."""

    @property
    def agrees(self) -> bool:
        """Whether every check passed."""
        ...

    @property
    def checks(self) -> Sequence[Checked]:
        """Every check, passed or not."""
        ...

    @property
    def slices(self) -> tuple[SliceCheck, ...]:
        """Fresh slices of the file, compared with LAPACK."""
        ...

    @property
    def bytes_read(self) -> int:
        """Decoded bytes of the matrix that were read."""
        ...

    @property
    def seconds(self) -> float:
        """Time it took."""
        ...


def verification_lines(store: str, source: str | None, found: Verified, width: int) -> list[str]:
    """Lay out a verification: every check with what was found against what is allowed, then the answer."""
    rows = [[one.name, _number(one.found), _number(one.allowed), "yes" if one.ok else "NO"] for one in found.checks]
    failed = [one.name.partition(":")[0] for one in found.checks if not one.ok]
    failed += ["slices"] * any(not one.within_bounds for one in found.slices)
    against = f"{store} and {source}" if source else store
    if found.agrees:
        answer = f"{store} agrees with {source}." if source else f"{store} is what was written, and agrees with itself."
    else:
        answer = (
            f"{against} DO NOT AGREE: {', '.join(failed)}."
            if source
            else f"{store} CONTRADICTS ITSELF: {', '.join(failed)}."
        )
    pairs = [("slices", slice_words(found.slices))] if source else []
    if source:
        pairs.append(("read", f"{show_bytes(found.bytes_read)} of the matrix in {show_seconds(found.seconds)}"))
    else:
        pairs.append(
            ("read", f"the factors alone, in {show_seconds(found.seconds)}; name the file as well to compare with it")
        )
    return [*table(["check", "found", "allowed", "holds"], rows, "lrrl"), "", *labelled(pairs, width), "", answer]


def verification_facts(store: str, source: str | None, found: Verified) -> Json:
    """All of it as one JSON object; its keys are documented in docs/json.md."""
    facts = {
        "store": store,
        "file": source,
        "agrees": found.agrees,
        "checks": [
            {"name": one.name, "found": one.found, "allowed": one.allowed, "ok": one.ok} for one in found.checks
        ],
        "slices": found.slices,
        "bytes_read": found.bytes_read,
        "seconds": found.seconds,
    }
    result: Json = plain(facts)
    return result


def _number(value: float) -> str:
    """A difference in three figures, whole numbers as they are."""
    return str(int(value)) if float(value).is_integer() and abs(value) < 1e6 else show_figures(value, 3)
