"""What becomes of every real file: a line each. ``python tests/adapt/real_index.py FOLDER`` prints the index anew."""

from __future__ import annotations

import csv
import re
import sys
from collections import Counter
from pathlib import Path

from bigsvd.errors import BigsvdError
from bigsvd.source import survey

INDEX = Path(__file__).with_name("real_files.csv")
# Reasons for which an array is no matrix, by a few words of what inspect says.
KINDS = {
    "sparse group": "sparse",
    "-D, and a matrix has 2 axes": "axes",
    "a single value": "single value",
    "not numbers": "no numbers",
    "kept as records": "table",
    "it is empty": "empty",
    "holds no values": "empty",
    "never decoded": "object codec",
    "filter is not installed": "filter",
    "link": "link",
    "unknown type": "unknown type",
    "does not know": "unknown type",
}


def outcome(path: Path) -> str:
    """How many of the arrays in a file are matrices and of which layout, or why none is, or why it is refused."""
    try:
        found = survey(path)
    except BigsvdError as error:
        why = re.search(r"looks like ([^;:]*)|(it is empty \(0 bytes\))", "; ".join(error.evidence))
        return f"refused as {type(error).__name__}: {why[1] or why[2] if why else _without(error.problem, path)}"
    usable = [one for one in found if one.usable]
    if usable:
        layouts = Counter(one.layout for one in usable)
        return f"{len(usable)} of {len(found)}: " + ", ".join(
            f"{name} {count}" for name, count in sorted(layouts.items())
        )
    reasons = Counter(next((kind for words, kind in KINDS.items() if words in one.reason), "other") for one in found)
    return f"none of {len(found)}: " + ", ".join(f"{kind} {count}" for kind, count in sorted(reasons.items()))


def _without(problem: str, path: Path) -> str:
    """A problem without the place of the folder."""
    return problem.replace(f"{path}/", "").replace(str(path), path.name)


def paths(folder: Path) -> list[str]:
    """Every path that the folder's own index lists."""
    with (folder / "index.csv").open(encoding="utf-8", newline="") as table:
        return sorted({row["path"] for row in csv.DictReader(table)})


def write(folder: Path) -> None:
    """Print the index of today."""
    table = csv.writer(sys.stdout, lineterminator="\n")
    table.writerow(["path", "outcome"])
    for path in paths(folder):
        table.writerow([path, outcome(folder / "files" / path)])


if __name__ == "__main__":
    write(Path(sys.argv[1]))
