"""The list of faults, row by row, and the tests of each: `python tests/faults/index.py` prints it.

A test whose name begins with ``test_NN_`` or ``test_NN_and_MM_`` belongs to those rows. Files of tests may have a table
`ROWS` of further ones, and an `EXPLAINED` that says what of a row cannot be built here; so has this file.
"""

from __future__ import annotations

import ast
import re
from pathlib import Path

HERE = Path(__file__).parent
TESTS = HERE.parent
# Every row in few words; expected everywhere: one message with its place, an exit status, earlier results untouched.
WHAT = {
    1: "a Zarr chunk deleted",
    2: "a folder in place of a Zarr chunk",
    3: "a chunk that cannot be read",
    4: "chunks of fill values left out on purpose",
    5: "a chunk cut short",
    6: "a shard cut to nothing",
    7: "a damaged shard index",
    8: "a flipped bit without a checksum",
    9: "a flipped bit under a checksum",
    10: "Zarr metadata cut short, empty or missing",
    11: "a shape larger than its chunks",
    12: "a wrong separator of chunk names",
    13: "another type in the metadata",
    14: "a wrong chunk shape",
    15: "an unknown codec, type or extension",
    16: "metadata of both versions of Zarr",
    17: "consolidated metadata that are out of date",
    18: "a zip store cut short",
    19: "an HDF5 file cut short",
    20: "no HDF5 file at all",
    21: "an HDF5 file cut short while it is read",
    22: "a file replaced or appended to while it is read",
    23: "a writer that crashed, old format",
    24: "a writer that crashed, new format",
    25: "a file locked by its writer",
    26: "a file system without locks, or read-only",
    27: "a filter that is not installed",
    28: "sources of a virtual dataset missing or of another shape",
    29: "broken links",
    30: "an external raw file that is short",
    31: "groups in circles",
    32: "a group for a matrix, or several matrices",
    33: "sides that are none, or one",
    34: "entries that are no numbers",
    35: "NaN and infinity",
    36: "constants, zeros, repeats, too low a rank",
    37: "large offsets in single precision",
    38: "very large, very small and denormal entries",
    39: "integers that would wrap",
    40: "damaged sparse groups",
    41: "scale, offset and missing values in attributes",
    42: "labels that do not fit",
    43: "no room on a device, before and while it is written",
    44: "SIGKILL and power cuts at any moment",
    45: "SIGTERM and Ctrl-C",
    46: "an output that exists, is the input, or may not be written",
    47: "a journal of another run, or damaged",
    48: "a memory limit below a chunk or a row",
    49: "two runs for one output",
    50: "few file descriptors, very many chunks",
    51: "a rank that is none, or too large",
    52: "other threads, layouts and formats",
    53: "clocks that jump, sleep, slow disks",
    54: "paths of every kind",
}
# Further tests, in other folders.
ROWS = {
    21: ["tests/flow/test_branches.py::test_a_value_that_changes_between_sweeps_stops_the_run"],
    22: ["tests/journal/test_identity.py::test_a_file_that_was_touched_is_another_input"],
    26: ["tests/factors/test_store_place.py::test_where_locks_do_not_work_the_record_decides"],
    40: [
        "tests/source/test_sparse_damage.py::test_damage_is_named",
        "tests/source/test_sparse_damage.py::test_an_index_outside_is_found_beyond_the_first_batch_and_before_anything_is_written",
        "tests/source/test_sparse_layouts.py::test_unsorted_and_repeated_indices_are_put_in_order_and_added",
    ],
    41: [
        "tests/source/test_hdf5_read.py::test_attributes_that_would_change_the_values_are_named",
        "tests/adapt/test_packed.py::test_a_scale_that_is_none_is_refused_unless_entries_are_taken_as_stored",
        "tests/adapt/test_packed.py::test_missing_is_told_on_packed_values_before_they_are_scaled",
        "tests/adapt/test_packed.py::test_a_decomposition_is_of_the_decoded_matrix",
    ],
    42: [
        "tests/source/test_layouts.py::test_names_whose_number_is_wrong_are_left_out_and_that_is_said",
        "tests/source/test_names_read.py::test_variable_text_that_is_no_utf8_is_kept_byte_by_byte",
        "tests/adapt/test_names_given.py::test_too_few_or_too_many_names_are_refused_with_both_numbers",
        "tests/factors/test_names_store.py::test_names_come_back_as_they_were_and_repeats_are_remarked",
        "tests/factors/test_names_store.py::test_bytes_that_are_no_text_are_written_by_number_and_that_is_said",
        "tests/flow/test_names.py::test_names_that_are_damaged_after_a_run_began_cost_the_names_and_not_the_run",
    ],
    43: [
        "tests/factors/test_store_place.py::test_a_device_that_refuses_leaves_the_earlier_result",
        "tests/journal/test_records.py::test_a_device_that_refuses_leaves_the_record_before",
        "tests/drive/test_room.py::test_a_full_device_is_said_with_place_and_missing_bytes",
    ],
    44: [
        "tests/factors/test_store_place.py::test_a_killed_writer_leaves_the_earlier_or_the_new_result_whole",
        "tests/journal/test_going_on.py::test_every_route_goes_on_with_the_same_bits",
    ],
    45: [
        "tests/cli/test_stops.py::test_a_stopped_run_says_where_it_stands_and_its_line_goes_on",
        "tests/cli/test_stops.py::test_a_second_signal_leaves_at_once_and_loses_nothing_that_was_kept",
    ],
    46: ["tests/factors/test_store_place.py::test_a_result_is_not_replaced_by_factors_of_itself"],
    47: [
        "tests/journal/test_identity.py::test_another_option_is_named",
        "tests/journal/test_identity.py::test_another_version_is_named",
        "tests/journal/test_going_on.py::test_a_damaged_record_costs_time_and_no_bits",
    ],
    48: ["tests/flow/test_promises.py::test_a_matrix_four_times_the_ceiling_is_decomposed_within_it"],
    49: ["tests/journal/test_run_folder.py::test_a_second_run_is_refused_and_told_who_is_at_it"],
    51: ["tests/flow/test_bad_input.py::test_a_bad_option_is_refused_and_named"],
    52: ["tests/flow/test_promises.py::test_one_two_and_four_workers_give_the_same_bits"],
}
EXPLAINED = {
    22: "what was changed without a trace, size, time and inode as before, is told by its words alone, which one sweep"
    " compares with the last; nothing comes after the last sweep of a run",
    40: "more than 2³¹ entries are not written in a test: pointers are held in 64 bits; 32-bit ones that wrapped fall",
    43: "a quota is not set up here; the system's answer to one is put in its place",
    44: "a power cut cannot be made: what is flushed to the device before a name is given is tested by the calls made",
    48: "a control group cannot be made in every test; its files are put in its place, and the kernel's own limits are"
    " set instead",
    53: "a sleeping machine is played by a stopped process and a clock that jumps",
}


def functions_in(path: Path) -> dict[str, ast.FunctionDef]:
    """Test functions of a file, by name."""
    nodes = ast.parse(path.read_text()).body
    return {node.name: node for node in nodes if isinstance(node, ast.FunctionDef) and node.name.startswith("test_")}


def constants_in(path: Path, name: str) -> dict[int, list[str] | str]:
    """A table at the top of a file, by row; empty where there is none, or where it is computed."""
    for node in ast.parse(path.read_text()).body:
        targets = node.targets if isinstance(node, ast.Assign) else [getattr(node, "target", None)]
        if any(isinstance(target, ast.Name) and target.id == name for target in targets):
            try:
                found: dict[int, list[str] | str] = ast.literal_eval(node.value)  # type: ignore[attr-defined]
            except ValueError:
                return {}
            return found
    return {}


def rows_of(name: str) -> list[int]:
    """Rows that the name of a test begins with."""
    begins = re.match(r"test_(\d\d(?:_and_\d\d)*)_", name)
    return [int(number) for number in begins[1].split("_and_")] if begins else []


def table() -> dict[int, list[str]]:
    """Names of the tests of every row."""
    found: dict[int, list[str]] = {row: list(ROWS.get(row, [])) for row in WHAT}
    for path in sorted(HERE.glob("test_*.py")):
        place = f"tests/faults/{path.name}::"
        for name in functions_in(path):
            for row in rows_of(name):
                found.setdefault(row, []).append(place + name)
        for row, names in constants_in(path, "ROWS").items():
            found.setdefault(row, []).extend(place + name for name in names if place + name not in found.get(row, []))
    return found


def explanations() -> dict[int, list[str]]:
    """What of a row cannot be built here, and why."""
    found: dict[int, list[str]] = {row: [why] for row, why in EXPLAINED.items()}
    for path in sorted(HERE.glob("test_*.py")):
        for row, why in constants_in(path, "EXPLAINED").items():
            found.setdefault(row, []).append(str(why))
    return found


def main() -> None:
    tests, why = table(), explanations()
    for row, what in WHAT.items():
        print(f"{row:2}  {what}")
        for name in tests[row]:
            print(f"      {name}")
        for words in why.get(row, []):
            print(f"      not built: {words}")


if __name__ == "__main__":
    main()
