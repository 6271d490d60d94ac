"""The table of components: every state, many components, one component, ties, and eighty columns."""

from __future__ import annotations

import numpy as np
import pytest
from certificates import certificate, states

from bigsvd.report import component_lines


def row(lines: list[str], number: int) -> str:
    return next(line for line in lines if line.split()[:1] == [str(number)])


def test_one_component_has_value_interval_shares_state_order_and_angle() -> None:
    lines = component_lines(certificate(1), 100)
    assert lines[0].split() == ["no.", "value", "interval", "share", "cumul.", "state", "order", "vectors"]
    assert lines[1].split() == [
        "1",
        "100.00000",
        "±",
        "0.00011",
        "90.00",
        "%",
        "90.00",
        "%",
        "resolved",
        "yes",
        "≤",
        "0.058°",
    ]


def test_states_are_told_apart_and_explained() -> None:
    mixed = certificate(
        4,
        state=states("resolved", "open", "bulk", "resolved"),
        value=np.array([10.0, 5.0, 4.9, 0.0]),
        lower=np.array([10.0, 4.0, 4.6, 0.0]),
        upper=np.array([10.001, 6.0, 5.2, 1e-12]),
        null=np.array([False, False, False, True]),
        index_proved=np.array([True, False, False, False]),
        angle_bound=np.array([1e-4, np.nan, np.nan, np.nan]),
    )
    lines = component_lines(mixed, 100)
    assert [row(lines, number).split()[-4 if number > 1 else -3] for number in (1, 2, 3, 4)] == [
        "yes",
        "open",
        "bulk",
        "zero",
    ]
    assert "4…6" in row(lines, 2)
    assert "≤ 1e-12" in row(lines, 4)
    assert row(lines, 2).endswith("no bound")
    text = "\n".join(lines)
    for word in ("Bulk:", "Open:", "Zero:", "--max-sweeps"):
        assert word in text


def test_words_that_do_not_occur_are_not_explained() -> None:
    text = "\n".join(component_lines(certificate(3), 100))
    for word in ("Bulk:", "Open:", "Zero:", "Tied:", "*"):
        assert word not in text


def test_a_tie_names_its_members_and_the_bound_of_their_space() -> None:
    tied = certificate(
        5,
        tied_first=np.array([0, 1, 1, 1, 4]),
        tied_last=np.array([0, 3, 3, 3, 4]),
        angle_bound=np.array([1e-3, 0.01, 0.01, 0.01, np.nan]),
    )
    lines = component_lines(tied, 100)
    assert all(row(lines, number).endswith("tied with 2–4") for number in (2, 3, 4))
    assert row(lines, 5).endswith("no bound")
    assert "2–4 within 0.58°" in "\n".join(lines)


def test_a_member_with_a_bound_of_its_own_does_not_hide_the_tie() -> None:
    tied = certificate(3, tied_first=np.array([0, 0, 2]), tied_last=np.array([0, 1, 2]))
    lines = component_lines(tied, 100)
    assert row(lines, 1).endswith("≤ 0.058°")
    assert row(lines, 2).endswith("tied with 1–2")
    assert "1–2 within 0.058°" in "\n".join(lines)


def test_noise_is_marked() -> None:
    lines = component_lines(certificate(2, below_noise=np.array([False, True])), 100)
    assert "resolved*" in row(lines, 2)
    assert "* not distinguishable from rounding." in lines


@pytest.mark.parametrize(("rank", "listed"), [(60, 60), (61, 50), (200, 50)])
def test_of_many_components_the_middle_is_counted(rank: int, listed: int) -> None:
    half = np.arange(rank) < rank // 2
    lines = component_lines(certificate(rank, state=np.where(half, 0, 2).astype(np.int8)), 100)
    numbers = [line.split()[0] for line in lines[1:] if line.split()[0].isdigit()]
    assert len(numbers) == listed
    assert numbers[0] == "1"
    assert numbers[-1] == str(rank)
    if rank == 200:
        assert "  …  150 more, 41–190: 60 resolved, 90 bulk" in lines


@pytest.mark.parametrize("width", [80, 120])
def test_lines_fit_the_terminal(width: int) -> None:
    wide = certificate(
        200,
        value=np.geomspace(123456.789, 1e-3, 200),
        lower=np.geomspace(123456.788, 0.99e-3, 200),
        upper=np.geomspace(123456.790, 1.01e-3, 200),
        tied_first=np.arange(200) // 2 * 2,
        tied_last=np.arange(200) // 2 * 2 + 1,
        total_energy=3e11,
    )
    assert max(map(len, component_lines(wide, width))) <= width


def test_a_matrix_of_zeros_has_no_shares_and_no_fault() -> None:
    nothing = np.zeros(2)
    lines = component_lines(
        certificate(
            2, value=nothing, lower=nothing, upper=nothing, null=np.ones(2, bool), total_energy=0.0, captured_share=1.0
        ),
        80,
    )
    assert "0.00 %" in row(lines, 1)
