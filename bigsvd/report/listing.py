"""The arrays of a file: which are matrices, how they are stored, why the others will not do, and what to type next."""

from __future__ import annotations

import re
from collections.abc import Sequence
from pathlib import PurePath

from bigsvd.report.layout import cells, table, wrap
from bigsvd.report.plain import Json, plain
from bigsvd.source import CONTRADICTORY, Candidate
from bigsvd.units import shell_word, show_bytes, show_count, show_shape

# Lines to type are given for so many matrices; for more, one to fill in.
MOST_LINES_TO_TYPE = 8
MOST_UNUSABLE = 40
HEADER = ("matrix", "shape", "type", "decoded", "stored", "chunks and filters")


def survey_lines(where: str, found: Sequence[Candidate], width: int) -> list[str]:
    """List what a file holds.

    Parameters
    ----------
    where : str
        The file, as it was typed.
    found : sequence of Candidate
        Every array of the file, usable or not.
    width : int
        Cells of a line; where the table is wider, chunks and filters go below each matrix.

    Returns
    -------
    list of str
    """
    usable = [candidate for candidate in found if candidate.usable and not candidate.level]
    copies = [candidate for candidate in found if candidate.usable and candidate.level]
    others = [candidate for candidate in found if not candidate.usable]
    arrays = "array" if len(found) == 1 else "arrays"
    matrices = "matrix" if len(usable) == 1 else "matrices"
    count = f"{show_count(len(found))} {arrays}, {show_count(len(usable))} {matrices} that can be decomposed"
    lines = wrap(f"{where}: {count}", width)
    if usable:
        lines += ["", *_matrix_table(usable, width)]
    lines += [line for words in _layouts(found) for line in ["", *wrap(words, width)]]
    unfoldings = [_unfolding(one) for one in usable if one.many_axes]
    notes = [*_axes_notes(usable), *unfoldings, *(words for one in usable for words in _notes(one))]
    lines += [line for words in notes for line in ["", *wrap(words, width)]]
    if usable:
        lines += ["", "To decompose, type:", *_to_type(where, usable)]
    if copies:
        rows = [[f"--level {one.level}", _name(one), show_shape(one.shape)] for one in copies]
        lines += ["", "Smaller copies of the same image, taken only if asked for:"]
        lines += ["  " + line for line in table(["", "", ""], rows, "llr")]
    if others:
        rows = [[_name(one), _what(one), one.reason] for one in others[:MOST_UNUSABLE]]
        lines += ["", "Not usable:", *("  " + line for line in table(["array", "what", "why not"], rows, "lll"))]
        if len(others) > MOST_UNUSABLE:
            lines.append(f"  … and {show_count(len(others) - MOST_UNUSABLE)} more, which --json lists")
    return lines


def survey_facts(where: str, found: Sequence[Candidate]) -> Json:
    """All of it as one JSON object; its keys are documented in docs/json.md."""
    usable = [candidate for candidate in found if candidate.usable]
    matrices = [
        plain(one) | {"command": command_line(where, one, named=len(usable) > 1) if one.usable else None}
        for one in found
    ]
    return {"file": where, "matrices": matrices}


def command_line(where: str, candidate: Candidate, *, named: bool) -> str:
    """The line that decomposes one matrix of a file, quoted for a shell.

    >>> command_line("night watch.h5", Candidate("/frames", samples_hint="columns"), named=True)
    "bigsvd decompose 'night watch.h5' --out night_watch_frames_factors.zarr --matrix /frames --samples columns"
    """
    stem = PurePath(where).stem
    if named:
        stem += "_" + candidate.path.strip("/")
    words = ["bigsvd", "decompose", where, "--out", re.sub(r"[^\w.-]+", "_", stem).strip("_") + "_factors.zarr"]
    if named:
        words += ["--matrix", candidate.path]
    if candidate.many_axes:
        words += ["--sample-axes", candidate.option]
    elif candidate.samples_hint == "columns":
        words += ["--samples", "columns"]
    elif candidate.samples_hint == CONTRADICTORY:
        # Somebody has to say it; rows are what is meant most often.
        words += ["--samples", "rows"]
    if candidate.packing is not None and candidate.packing.problem:
        words.append("--raw")
    if candidate.outside:
        words.append("--follow-links")
    return " ".join(map(shell_word, words))


def _unfolding(candidate: Candidate) -> str:
    """Which axes of a stack become samples."""
    names = candidate.axis_names or ("",) * len(candidate.shape)
    axes = ", ".join(f"{number} {name}".strip() for number, name in enumerate(names))
    if candidate.sample_axes:
        return f"{_name(candidate)}: axes {axes}; samples are axis {candidate.option} ({candidate.hint_reason})"
    return f"{_name(candidate)}: axes {axes}; usable with --sample-axes, which names those that become the samples"


def _layouts(found: Sequence[Candidate]) -> list[str]:
    """What layout each array was taken for, and what in the file says so; arrays of the same layout together."""
    together: dict[tuple[str, str], list[str]] = {}
    for one in found:
        if one.layout:
            together.setdefault((one.layout, one.marker), []).append(_name(one))
    return [
        f"Taken for {layout} ({marker}): {_listed(names, 'arrays')}" for (layout, marker), names in together.items()
    ]


def _axes_notes(usable: Sequence[Candidate]) -> list[str]:
    """What the file says of samples and names; matrices of which the same is said together."""
    together: dict[tuple[str, ...], list[str]] = {}
    for one in usable:
        for words in _said_of_axes(one):
            together.setdefault(words, []).append(_name(one))
    return [
        f"{_listed(names, 'matrices')}: {before}{'its' if len(names) == 1 else 'their'}{after}"
        if after
        else f"{_listed(names, 'matrices')}: {before}"
        for (before, after), names in together.items()
    ]


def _said_of_axes(candidate: Candidate) -> list[tuple[str, str]]:
    """Sentences about the axes of a matrix, cut where one says its or their."""
    said = []
    hint, reason = candidate.samples_hint, candidate.hint_reason
    if hint == CONTRADICTORY:
        words = f"markers contradict each other about the samples ({reason})"
        said.append((f"{words}; say --samples rows or --samples columns", ""))
    elif hint:
        said.append(("samples are ", f" {hint} ({reason})"))
    named = (("rows", candidate.row_names), ("columns", candidate.column_names))
    places = [f"of {which} in {names.words}" for which, names in named if names is not None]
    if places:
        said.append((f"names {', '.join(places)}", ""))
    return [*said, *((remark, "") for remark in candidate.remarks)]


def _notes(candidate: Candidate) -> list[str]:
    """What is to be known of a matrix before it is decomposed: absent parts, how entries are decoded, other files."""
    notes = []
    if candidate.absent_chunks:
        count, several = show_count(candidate.absent_chunks), candidate.absent_chunks > 1
        notes.append(
            f"{_name(candidate)}: {count} {'chunks were' if several else 'chunk was'} never written; decompose stops at"
            " that, or reads the fill value with --absent fill"
        )
    packing = candidate.packing
    if packing is not None and packing.problem:
        notes.append(
            f"{_name(candidate)}: packed, but {packing.problem}; decompose needs --raw, which takes it as stored"
        )
    elif packing is not None and packing.words:
        notes.append(f"{_name(candidate)}: decoded by {packing.words}; --raw takes entries as stored")
    notes += [f"{_name(candidate)}: {caution}" for caution in (packing.cautions if packing is not None else ())]
    if candidate.outside:
        notes.append(f"{_name(candidate)}: lies partly in {_listed(candidate.outside)}; decompose needs --follow-links")
    return notes


def _listed(files: Sequence[str], what: str = "files") -> str:
    """A few files by name, the others counted."""
    more = f" and {show_count(len(files) - 3)} more {what}" if len(files) > 4 else ""
    return ", ".join(files if len(files) <= 4 else files[:3]) + more


def _name(candidate: Candidate) -> str:
    """Path of an array inside its file."""
    return candidate.path or "(the array)"


def _matrix_table(usable: Sequence[Candidate], width: int) -> list[str]:
    """One line a matrix, or two where the terminal is narrow."""
    rows = [
        [
            _name(one),
            show_shape(one.shape),
            one.dtype,
            _size(one.decoded_bytes),
            _size(one.stored_bytes),
            one.encoding or "–",
        ]
        for one in usable
    ]
    lines = table(HEADER, rows, "lrlrrl")
    if max(map(cells, lines)) <= width:
        return lines
    head, *body = table(HEADER[:-1], [row[:-1] for row in rows], "lrlrr")
    return [
        head,
        *(line for short, row in zip(body, rows, strict=True) for line in (short, *wrap(row[-1], width, first="    "))),
    ]


def _size(size: int | None) -> str:
    """Bytes, or a question mark where the format does not tell."""
    return "?" if size is None else show_bytes(size)


def _to_type(where: str, usable: Sequence[Candidate]) -> list[str]:
    """Lines to type, of many matrices the likeliest one's."""
    named = len(usable) > 1
    if len(usable) <= MOST_LINES_TO_TYPE:
        return ["  " + command_line(where, one, named=named) for one in usable]
    line = command_line(where, Candidate("PATH"), named=True)
    return ["  " + line, "  where PATH is one of those above"]


def _what(candidate: Candidate) -> str:
    """Shape and type of an array, the type left out where the reason names it."""
    kind = "" if candidate.reason.endswith(candidate.dtype) else candidate.dtype
    return f"{show_shape(candidate.shape)} {kind}".strip() or "–"
