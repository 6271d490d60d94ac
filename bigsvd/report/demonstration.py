"""What the demo wrote, and what to type next."""

from __future__ import annotations

import shlex
from collections.abc import Sequence
from pathlib import Path
from typing import Protocol

import numpy as np

from bigsvd.report.layout import table, wrap
from bigsvd.report.plain import Json, plain
from bigsvd.units import show_bytes, show_shape


class Written(Protocol):
    """One matrix of the demo, as written."""

    @property
    def which(self) -> str:
        """Its name."""
        ...

    @property
    def path(self) -> Path:
        """Its file."""
        ...

    @property
    def matrix(self) -> str:
        """Its path inside the file."""
        ...

    @property
    def what(self) -> str:
        """The matrix in a few words."""
        ...

    @property
    def shape(self) -> tuple[int, int]:
        """Rows and columns."""
        ...

    @property
    def dtype(self) -> np.dtype:
        """Type of its entries."""
        ...

    @property
    def planted_rank(self) -> int:
        """Number of planted components."""
        ...

    @property
    def decoded_bytes(self) -> int:
        """Bytes in memory."""
        ...

    @property
    def stored_bytes(self) -> int:
        """Bytes on disk."""
        ...


def demo_lines(invented: str, files: Sequence[Written], width: int) -> list[str]:
    """Say what was written, and the lines that decompose it."""
    rows = [
        [
            str(file.path),
            file.what,
            f"{show_shape(file.shape)} {file.dtype}",
            show_bytes(file.decoded_bytes),
            show_bytes(file.stored_bytes),
            str(file.planted_rank),
        ]
        for file in files
    ]
    header = ("file", "what", "matrix", "decoded", "stored", "planted")
    lines = table(header, rows, "lllrrr")
    if max(map(len, lines)) > width:
        lines = []
        for path, what, matrix, decoded, stored, planted in rows:
            text = f"{what}; {matrix}; {decoded} decoded, {stored} stored; {planted} planted components"
            lines += [path, *wrap(text, width, first="    ")]
    typed = [
        ["bigsvd", "decompose", str(file.path), "--out", str(_out(file)), "--rank", str(2 * file.planted_rank)]
        for file in files
    ]
    folder = shlex.quote(str(files[0].path.parent))
    return [
        *wrap(invented, width),
        "",
        *lines,
        "",
        "To decompose, and to see how near the planted structure is found, type:",
        *("  " + shlex.join(words) for words in typed),
        f"  python -m bigsvd.demo {folder}",
    ]


def demo_facts(invented: str, files: Sequence[Written]) -> Json:
    """All of it as one JSON object; its keys are documented in docs/json.md."""
    names = ("which", "path", "matrix", "what", "shape", "dtype", "planted_rank", "decoded_bytes", "stored_bytes")
    result: Json = plain(
        {"invented": invented, "files": [{name: getattr(file, name) for name in names} for file in files]}
    )
    return result


def _out(file: Written) -> Path:
    """Where the comparison looks for the result."""
    return file.path.with_name(f"{file.which}_factors.zarr")
