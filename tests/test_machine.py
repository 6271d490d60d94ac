"""What the machine allows: limits of nested control groups are found wherever they are set."""

from __future__ import annotations

from pathlib import Path

import pytest

from bigsvd import machine


@pytest.mark.parametrize(
    ("entry", "file"),
    [
        ("0::/user.slice/job.scope", "user.slice/job.scope/memory.max"),
        ("0::/user.slice/job.scope", "user.slice/memory.max"),
        ("0::/", "memory.max"),
        ("4:cpu,memory:/jobs/7", "memory/jobs/7/memory.limit_in_bytes"),
        ("4:memory:/jobs/7", "memory/memory.limit_in_bytes"),
    ],
)
def test_a_limit_of_a_control_group_or_of_one_above_it_is_found(tmp_path: Path, entry: str, file: str) -> None:
    place = tmp_path / "sys/fs/cgroup" / file
    place.parent.mkdir(parents=True)
    place.write_text("805306368\n")
    (tmp_path / "proc/self").mkdir(parents=True)
    (tmp_path / "proc/self/cgroup").write_text(f"3:cpuset:/elsewhere\n{entry}\n")
    assert machine._group_limits(tmp_path) == [805306368]


def test_a_group_without_limit_or_a_system_without_groups_sets_none(tmp_path: Path) -> None:
    assert machine._group_limits(tmp_path) == []
    (tmp_path / "sys/fs/cgroup").mkdir(parents=True)
    (tmp_path / "sys/fs/cgroup/memory.max").write_text("max\n")
    assert machine._group_limits(tmp_path) == []


def test_the_default_ceiling_is_half_of_the_least_limit_in_whole_steps(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(machine, "_group_limits", lambda: [1500 * 2**20, 4 * 2**30])
    assert machine.default_ceiling() == 512 * 2**20
