"""The demo files: invented and saying so, the same bytes every time, with the planted structure really in them."""

from pathlib import Path

import h5py
import numpy as np
import pytest
import zarr

from bigsvd.demo import DemoFile, compare_with_planted, write_demo
from bigsvd.demo.__main__ import main
from bigsvd.errors import ResultExistsError

SCALE = 0.02


@pytest.fixture(scope="module")
def demo(tmp_path_factory) -> tuple[Path, list[DemoFile]]:
    folder = tmp_path_factory.mktemp("demo")
    return folder, write_demo(folder, scale=SCALE)


def matrix_of(file: DemoFile) -> np.ndarray:
    if file.path.suffix == ".h5":
        with h5py.File(file.path) as opened:
            return opened[file.matrix][:]
    return zarr.open_array(str(file.path), mode="r")[:]


class Factors:
    """LAPACK's factors of the centred matrix, through the smaller Gram matrix in double precision."""

    def __init__(self, matrix: np.ndarray) -> None:
        centred = matrix.astype("f8")
        centred -= centred.mean(axis=0)
        energy, left = np.linalg.eigh(centred @ centred.T)
        self.singular_values = np.sqrt(energy[::-1][:12])
        self.left_vectors = left[:, ::-1][:, :12]
        self.right_vectors = centred.T @ self.left_vectors / self.singular_values


def every_byte(folder: Path) -> dict[str, bytes]:
    return {str(part.relative_to(folder)): part.read_bytes() for part in sorted(folder.rglob("*")) if part.is_file()}


def test_every_file_says_that_it_is_invented(demo):
    folder, (stack, water) = demo
    with h5py.File(stack.path) as opened:
        assert opened.attrs["statement"].startswith("Invented data.")
        assert opened[stack.matrix].attrs["statement"].startswith("Invented data.")
    assert zarr.open_array(str(water.path), mode="r").attrs["statement"].startswith("Invented data.")
    with np.load(folder / "planted.npz") as planted:
        assert str(planted["statement"]).startswith("Invented data.")


def test_files_hold_what_is_reported_of_them(demo):
    folder, (stack, water) = demo
    with h5py.File(stack.path) as opened:
        frames = opened[stack.matrix]
        assert (frames.shape, frames.dtype) == (stack.shape, stack.dtype) == ((400, 160 * 256), np.dtype("u2"))
        assert (frames.compression, frames.shuffle, frames.chunks) == ("gzip", True, (200, 4096))
        assert [name for name in opened["camera"] if opened["camera"][name].ndim == 2] == ["frames"]
    array = zarr.open_array(str(water.path), mode="r")
    assert (array.shape, array.dtype) == (water.shape, water.dtype) == ((1000, 8192), np.dtype("f4"))
    assert array.metadata.zarr_format == 3
    assert stack.stored_bytes == stack.path.stat().st_size
    assert stack.decoded_bytes == 400 * 160 * 256 * 2
    assert not list(folder.glob("*.partial"))


def test_full_size_is_at_least_1600_megabytes_each():
    from bigsvd.demo import scenario

    assert scenario.FRAMES * scenario.FRAME_HEIGHT * scenario.FRAME_WIDTH * 2 >= 1.6e9
    assert scenario.SAMPLES * scenario.COMPOUNDS * 4 >= 1.6e9


def test_same_bytes_with_one_worker_or_three_and_written_twice(tmp_path, monkeypatch):
    scale, seen = 0.03, []
    for workers in (1, 3, 3):
        monkeypatch.setattr("bigsvd.demo.write.usable_cores", lambda workers=workers: workers)
        write_demo(tmp_path, scale=scale)
        seen.append(every_byte(tmp_path))
    assert len(seen[0]) == 15  # the stack, planted.npz, and zarr.json with three by four chunks
    assert seen[0] == seen[1] == seen[2]


def test_edge_chunks_are_read_back_whole(tmp_path):
    """500 frames are two chunks and a half: the last is stored filled up, and shows no trace of it."""
    stack, _ = write_demo(tmp_path, scale=0.025)
    frames = matrix_of(stack)
    assert frames.shape == (500, 160 * 256)
    assert frames.min() > 30


@pytest.mark.parametrize("which", [0, 1])
def test_decomposition_by_lapack_finds_the_planted_structure(demo, which):
    folder, files = demo
    rows = compare_with_planted(Factors(matrix_of(files[which])), folder, files[which].which)
    assert len(rows) == files[which].planted_rank
    for row in rows:
        assert row.as_expected, row


@pytest.mark.parametrize("which", [0, 1])
def test_planted_triplets_are_the_noiseless_part_of_the_file(demo, which):
    """What is left after taking the planted part off is noise of the deviation told, and nothing stands out of it."""
    folder, files = demo
    name, matrix = files[which].which, matrix_of(files[which]).astype("f8")
    matrix -= matrix.mean(axis=0)
    with np.load(folder / "planted.npz") as planted:
        left, values, right = (
            planted[f"{name}_{part}"] for part in ("left_vectors", "singular_values", "right_vectors")
        )
        noise = planted[f"{name}_noise"]
    np.testing.assert_allclose(left.T @ left, np.eye(len(values)), atol=1e-12)
    np.testing.assert_allclose(right.T @ right, np.eye(len(values)), atol=1e-12)
    assert np.all(np.diff(values) < 0)
    rest = matrix - (left * values) @ right.T
    m, n = rest.shape
    # Standard error of a deviation from N entries is 1/√(2N) of it; five of them, and the row lost to centring.
    assert np.std(rest) / (noise * np.sqrt(1 - 1 / m)) == pytest.approx(1, abs=5 / np.sqrt(2 * m * n))
    edge = noise * (np.sqrt(m) + np.sqrt(n))
    assert np.sqrt(np.linalg.eigvalsh(rest @ rest.T)[-1]) < 1.02 * edge
    assert values[-1] > 1.2 * edge


@pytest.mark.parametrize("which", ["night_watch", "tide_water"])
def test_planted_values_are_apart_and_above_the_noise_at_full_size(which):
    from bigsvd.demo import scenario

    planted = getattr(scenario, which)()
    _, values, _ = planted.factors()
    m, n = planted.shape
    assert np.all(values[:-1] / values[1:] > 1.3)
    assert values[-1] > 5 * planted.noise * (np.sqrt(m) + np.sqrt(n))


def test_demo_replaces_its_own_files_but_nobody_elses(tmp_path):
    write_demo(tmp_path, scale=0.001)
    write_demo(tmp_path, scale=0.0012)
    stranger = tmp_path / "tide_water.zarr"
    (tmp_path / "planted.npz").unlink()
    (tmp_path / "planted.npz").write_text("mine")
    before = every_byte(stranger)
    with pytest.raises(ResultExistsError, match=r"planted\.npz is there and was not written by the demo"):
        write_demo(tmp_path, scale=0.001)
    assert (tmp_path / "planted.npz").read_text() == "mine"
    assert every_byte(stranger) == before


def test_failure_half_way_leaves_nothing_behind(tmp_path):
    def fail(name: str, done: int, total: int) -> None:
        raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        write_demo(tmp_path, scale=0.001, progress=fail)
    assert list(tmp_path.iterdir()) == []


def test_progress_counts_every_decoded_byte(tmp_path):
    seen: dict[str, tuple[int, int]] = {}
    files = write_demo(tmp_path, scale=0.001, progress=lambda name, done, total: seen.update({name: (done, total)}))
    assert seen == {file.which: (file.decoded_bytes, file.decoded_bytes) for file in files}


def test_printed_comparison_ends_with_0_when_found_and_3_when_not(demo, monkeypatch, capsys):
    folder, files = demo
    factors = {f"{file.which}_factors.zarr": Factors(matrix_of(file)) for file in files}
    monkeypatch.setattr("bigsvd.factors.open_factors", lambda path: factors[path.name])
    assert main([str(folder)]) == 0
    printed = capsys.readouterr().out
    assert printed.startswith("Invented data.")
    assert "Every planted component was found" in printed
    water = factors["tide_water_factors.zarr"]
    water.right_vectors = np.roll(water.right_vectors, 1, axis=1)
    assert main([str(folder)]) == 3
    assert "Not every planted component was found" in capsys.readouterr().out


def test_printed_comparison_without_results_ends_with_2(demo, capsys):
    folder, _ = demo
    assert main([str(folder)]) == 2
    assert "night_watch_factors.zarr" in capsys.readouterr().err
    assert main([]) == 2
