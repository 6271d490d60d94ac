"""``python -m bigsvd.demo DIR``: print how near the decompositions in DIR came to what was planted there."""

from __future__ import annotations

import sys
from pathlib import Path

from bigsvd.demo.compare import Agreement, compare_with_planted
from bigsvd.demo.scenario import INVENTED
from bigsvd.errors import BigsvdError


def main(arguments: list[str]) -> int:
    """Compare ``night_watch_factors.zarr`` and ``tide_water_factors.zarr`` in a folder with what was planted.

    Returns
    -------
    int
        0 where all of it was found as near as the noise lets it be, 3 where not, 2 where there is nothing to compare.
    """
    from bigsvd.factors import open_factors

    if len(arguments) != 1:
        print("Usage: python -m bigsvd.demo DIR", file=sys.stderr)
        return 2
    folder = Path(arguments[0])
    print(INVENTED)
    all_found = True
    try:
        for which in ("night_watch", "tide_water"):
            table = compare_with_planted(open_factors(folder / f"{which}_factors.zarr"), folder, which)
            print(f"\n{which}: planted against found\n{table_text(table)}")
            all_found = all_found and all(row.as_expected for row in table)
    except BigsvdError as error:
        print(f"{type(error).__name__}: {error}", file=sys.stderr)
        return 2
    if all_found:
        print("\nEvery planted component was found as near as the noise in the matrix lets it be.")
        return 0
    print("\nNot every planted component was found as near as the noise in the matrix lets it be.")
    return 3


def table_text(table: list[Agreement]) -> str:
    """Lay out a comparison as lines of text: singular values, and angles in degrees."""
    lines = [f"{'':>9}  {'planted':>10}  {'found':>10}  {'expected':>10}  {'angle':>7}  {'expected':>8}"]
    for row in table:
        lines.append(
            f"{row.component:>9}  {row.planted_value:>10,.1f}  {row.found_value:>10,.1f}  {row.expected_value:>10,.1f}"
            f"  {row.angle:>6.2f}°  {row.expected_angle:>7.2f}°"
        )
    return "\n".join([*lines, "expected: of the exact decomposition, since noise raises values and turns vectors"])


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
