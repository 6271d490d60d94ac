"""What the journal costs is measured on runs that make the same bits."""

from __future__ import annotations

import json
import re
import sys
from pathlib import Path

import pytest

sys.path.insert(0, str(Path(__file__).parents[1]))
from bench import journal as benchmark


def test_runs_with_and_without_a_journal_are_compared(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    words = [str(tmp_path / "small.h5"), "--gigabytes", "0.02", "--rank", "5", "--memory", "512MiB", "--pairs", "1"]
    benchmark.main([*words, "--result", str(tmp_path / "found.json")])
    text = capsys.readouterr().out
    assert re.search(r"pair 1: with [0-9.]+ s, without [0-9.]+ s, ratio [0-9.]+ .* savings in ", text), text
    assert re.search(r"with over without: [0-9.]+ ", text), text
    (pair,) = json.loads((tmp_path / "found.json").read_text())
    assert pair["with"]["digest"] == pair["without"]["digest"]
    assert pair["without"]["savings"] == 0
    assert pair["without"]["saved_seconds"] == 0
    # Nothing of the runs stays beside the file.
    assert sorted(path.name for path in tmp_path.iterdir()) == ["found.json", "small.h5", "small.h5.truth.npz"]


def test_medians_over_pairs() -> None:
    def pair(kept: float, bare: float) -> dict[str, dict[str, float]]:
        return {
            "with": {"seconds": kept, "processor_seconds": 2 * kept, "saved_seconds": 0.1},
            "without": {"seconds": bare, "processor_seconds": 2 * bare, "saved_seconds": 0.0},
        }

    lines = benchmark.summary([pair(10.1, 10.0), pair(10.5, 10.0), pair(10.0, 10.0)])
    assert lines[0].startswith("with over without: 1.010 (1.000–1.050, 3 pairs); processor seconds 1.010")
    assert "1.0% of a run" in lines[1]
