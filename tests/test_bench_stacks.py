"""The generator of invented stacks: the same entries in both layouts, and what was planted is found in both."""

from __future__ import annotations

import sys
from pathlib import Path

import h5py
import numpy as np
import pytest

ROOT = Path(__file__).parents[1]
if str(ROOT) not in sys.path:
    sys.path.insert(0, str(ROOT))

from bench import stacks  # noqa: E402


def test_both_layouts_hold_the_same_entries_and_the_planted_images(tmp_path: Path) -> None:
    stack = stacks.make_stack(130, 24)
    np.testing.assert_allclose(stack.images.T @ stack.images, np.eye(stacks.RANK), atol=1e-12)
    courses = stack.courses(0, 130)
    np.testing.assert_allclose(courses.T @ courses, np.eye(stacks.RANK), atol=1e-12)
    for layout in stacks.LAYOUTS:
        assert stacks.write_stack(stack, tmp_path / f"{layout}.h5", layout, (60, 10)) > 0
    with h5py.File(tmp_path / "frames.h5") as frames, h5py.File(tmp_path / "tiles.h5") as tiles:
        assert (frames["stack"].chunks, tiles["stack"].chunks) == ((1, 24, 24), (60, 10, 10))
        values = frames["stack"][...]
        assert np.array_equal(values, tiles["stack"][...])
    np.testing.assert_array_equal(values, np.concatenate([*stack.batches()]))
    spread = np.linalg.svd(values.reshape(130, -1) - 2000.0, compute_uv=False)
    # Noise of 20 counts adds about 20·(√130 + √576) to what stands far above it.
    np.testing.assert_allclose(spread[:4], stack.values[:4], rtol=0.05)


def test_a_small_benchmark_says_what_it_found(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    words = [str(tmp_path), "--frames", "300", "--side", "64", "--tile", "100", "20", "--memory", "512MiB"]
    assert stacks.main(words) == 0
    printed = capsys.readouterr().out
    assert "300 × 64 × 64 uint16, 2.34 MiB; invented" in printed
    for layout in stacks.LAYOUTS:
        line = next(line for line in printed.splitlines() if line.startswith(f"{layout}: swept"))
        assert "peak" in line
        assert float(line.split("values within ")[1].split(",")[0]) < 0.01
        angle, noise = (float(part.split("°")[0]) for part in line.split("images within ")[1].split("alone: "))
        assert 0.8 * noise < angle < 1.2 * noise
