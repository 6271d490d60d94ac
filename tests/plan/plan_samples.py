"""Specs and requests that plans are drawn from."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import fields, replace

import numpy as np
from hypothesis import strategies as st

from bigsvd.plan import NOMINAL, Plan, Rate, Rates, Request, make_plan
from bigsvd.source import MatrixSpec

MIB = 2**20
STORAGES = ("memory", "npy", "plain", "compressed", "zarr", "graph")
CODECS = (("shuffle", "gzip"), ("bitshuffle",), ("zstd",), ("library",), ("a codec of tomorrow",))
TYPES = ("b1", "u1", "i2", "u2", "i4", "i8", "f2", "f4", "f8", "c8", "c16")


def spec(
    rows: int,
    columns: int,
    dtype: str = "f4",
    *,
    chunks: tuple[int, int] = (1, 1),
    storage: str = "plain",
    codecs: tuple[str, ...] | None = None,
    **parts: str,
) -> MatrixSpec:
    """Spec of a matrix that need not exist; chunks that are compressed pass shuffle and gzip unless told otherwise."""
    if codecs is None:
        codecs = ("shuffle", "gzip") if storage == "compressed" else ()
    hints = {"samples_hint": parts.get("samples_hint"), "hint_reason": parts.get("hint_reason", "")}
    return MatrixSpec("cells.h5/counts", (rows, columns), np.dtype(dtype), chunks, storage, codecs=codecs, **hints)


def plan_of(
    matrix: MatrixSpec,
    *,
    ceiling: int = 2048 * MIB,
    processors: int = 2,
    rates: Rates = NOMINAL,
    **options: object,
) -> Plan:
    """Plan a matrix with the given options."""
    request = Request(**options)  # type: ignore[arg-type]
    return make_plan(matrix, request, ceiling=ceiling, processors=processors, rates=rates)


def free_but(**slow: Rate | dict[str, Rate] | float) -> Rates:
    """Rates of a machine on which nothing takes time but what is given."""
    free: dict[str, object] = {}
    for field in fields(Rates):
        value = getattr(NOMINAL, field.name)
        if isinstance(value, Mapping):
            free[field.name] = dict.fromkeys(value, Rate(1e30)) | slow.pop(field.name, {})  # type: ignore[operator]
        else:
            free[field.name] = Rate(1e30) if isinstance(value, Rate) else 0.0
    return replace(NOMINAL, **free | slow)  # type: ignore[arg-type]


@st.composite
def specs(draw: st.DrawFn) -> MatrixSpec:
    """Matrices from one entry to some hundred GB, in every storage class, chunked in every way."""
    rows, columns = (draw(st.one_of(st.integers(1, 300), st.integers(300, 200_000))) for _ in range(2))
    storage = draw(st.sampled_from(STORAGES))
    chunks = (draw(st.integers(1, min(rows, 3000))), draw(st.integers(1, min(columns, 3000))))
    if storage in ("memory", "graph"):
        chunks = (1, 1)
    if storage == "npy":
        chunks = (1, columns)
    codecs = draw(st.sampled_from(CODECS)) if storage in ("compressed", "zarr") else ()
    return spec(rows, columns, draw(st.sampled_from(TYPES)), chunks=chunks, storage=storage, codecs=codecs)


@st.composite
def requests(draw: st.DrawFn) -> Request:
    """Options as users combine them."""
    share = draw(st.sampled_from([None, None, None, 0.9]))
    return Request(
        rank=None if share else draw(st.sampled_from([None, 1, 7, 20, 200])),
        variance=share,
        max_rank=draw(st.sampled_from([10, 500])),
        samples=draw(st.sampled_from(["rows", "columns", None])),
        center=draw(st.sampled_from(["features", "none"])),
        scale=draw(st.sampled_from(["unit", "none"])),
        route=draw(st.sampled_from(["auto", "auto", "auto", "direct", "gram", "tsqr", "krylov"])),
        axis=draw(st.sampled_from(["auto", "auto", "rows", "columns"])),
        panel_lines=draw(st.sampled_from([None, None, None, 17])),
        seed=draw(st.integers(0, 3)),
    )
