"""A short storm and a short soak; scripts/kill-storm makes long ones."""

from __future__ import annotations

import signal
from pathlib import Path

import pytest
import soak
from kill_storm import storm

pytestmark = pytest.mark.alone


@pytest.mark.parametrize(("number", "kills"), [(signal.SIGKILL, 4), (signal.SIGTERM, 2)])
def test_44_and_45_runs_hit_at_random_moments_end_with_the_same_bits(number: int, kills: int, tmp_path: Path) -> None:
    tally = storm(kills, tmp_path, number=number, seed=1)
    assert tally.kills == kills
    assert tally.runs >= 1
    assert tally.differ == 0
    assert max(tally.leaving) < 10


def test_44_one_process_that_goes_on_and_on_holds_no_more_each_time(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    from bigsvd.journal import journal
    from bigsvd.plan import geometry

    for name, where in (("WAVE_SECONDS", geometry), ("WORTH_KEEPING", journal), ("SHARE_OF_TIME", journal)):
        # The soak sets them for its process; here that is the one of all tests.
        monkeypatch.setattr(where, name, getattr(where, name))
    soaked = soak.soak(4.0, tmp_path, seed=3)
    assert soaked.faults == []
    assert soaked.held
    assert soaked.judge() == []


def test_a_soak_tells_what_grows(tmp_path: Path) -> None:
    grown = soak.Soaked([soak.Held(100 * soak.MIB + step * 5 * soak.MIB, 9 + step // 60, 3) for step in range(120)])
    assert [words.split(":")[0] for words in grown.judge()] == ["resident size grew by 295.0 MiB", "descriptors"]
