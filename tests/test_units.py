"""Bytes, seconds and counts at the doors."""

from __future__ import annotations

import re

import pytest
from hypothesis import given
from hypothesis import strategies as st

from bigsvd.errors import OptionError
from bigsvd.units import parse_bytes, show_bytes, show_count, show_seconds, show_shape


@pytest.mark.parametrize(
    ("text", "size"),
    [
        ("512", 512), ("512B", 512), ("2k", 2048), ("2K", 2048), ("2kB", 2000), ("2KiB", 2048), ("800MB", 800_000_000),
        ("1.5 GB", 1_500_000_000), ("1.5GiB", 1_610_612_736), (" 4 GiB ", 4 * 2**30), ("2G", 2**31), ("1T", 2**40),
        ("1TB", 10**12), ("0.5k", 512), (4096, 4096), ("3gib", 3 * 2**30),
    ],
)  # fmt: skip
def test_sizes_are_read_as_people_write_them(text: str | int, size: int) -> None:
    assert parse_bytes(text) == size


@pytest.mark.parametrize(
    "text",
    ["", "much", "0", "0 GiB", "-2GiB", "2 XB", "2GiBs", "2,5GiB", "1e9", "GiB", "0.1B", "nan", "inf", "2 G iB", 0, -5],
)
def test_what_is_no_size_above_zero_is_refused(text: str | int) -> None:
    with pytest.raises(OptionError) as refused:
        parse_bytes(text, "--scratch-limit")
    assert refused.value.problem == f"--scratch-limit needs a size such as 2GiB, not {str(text)!r}"
    assert refused.value.remedy == "Write --scratch-limit 2GiB or --scratch-limit 800MB."


@given(st.integers(1, 2**50))
def test_an_integer_is_returned_as_it_is(size: int) -> None:
    assert parse_bytes(size) == size
    assert parse_bytes(f"{size}B") == size


@pytest.mark.parametrize(
    ("size", "text"),
    [
        (0, "0 B"), (1, "1 B"), (1023, "1023 B"), (1024, "1 KiB"), (1234, "1.21 KiB"), (12_345, "12.1 KiB"),
        (123_456, "121 KiB"), (2**20, "1 MiB"), (2**30, "1 GiB"), (512 * 2**20, "512 MiB"), (3 * 2**40, "3 TiB"),
        (5000 * 2**40, "5000 TiB"), (10 * 2**30, "10 GiB"), (100 * 2**20, "100 MiB"), (1.5 * 2**30, "1.5 GiB"),
    ],
)  # fmt: skip
def test_bytes_are_shown_with_three_figures(size: float, text: str) -> None:
    assert show_bytes(size) == text


@given(st.integers(1, 2**55))
def test_shown_bytes_are_read_back_to_within_half_a_per_cent(size: int) -> None:
    shown = show_bytes(size)
    assert re.fullmatch(r"\d+(\.\d+)? (B|KiB|MiB|GiB|TiB)", shown)
    assert parse_bytes(shown) == pytest.approx(size, rel=0.005)


@pytest.mark.parametrize(
    ("seconds", "text"),
    [
        (0, "0.0 s"), (0.04, "0.0 s"), (4.26, "4.3 s"), (9.94, "9.9 s"), (9.96, "10 s"), (42.4, "42 s"), (60, "1 min"),
        (75, "1 min 15 s"), (3599.6, "1 h"), (3600, "1 h"), (7260, "2 h 1 min"), (86_400, "24 h"),
    ],
)  # fmt: skip
def test_durations_are_shown_as_people_say_them(seconds: float, text: str) -> None:
    assert show_seconds(seconds) == text


def test_counts_and_shapes_have_their_thousands_separated() -> None:
    assert show_count(1_234_567) == "1,234,567"
    assert show_count(999) == "999"
    assert show_shape((100_000, 5000)) == "100,000 × 5,000"
    assert show_shape((3,)) == "3"
