"""Invented results for these tests, and the one kept for ever under ``stores/``."""

from dataclasses import replace
from pathlib import Path

import numpy as np

from bigsvd.certify import Certificate, SliceCheck
from bigsvd.factors import Factors, FactorsWriter, layout, writer

DTYPES = ("float32", "float64", "complex64", "complex128")


class Sample:
    """A small matrix in the units of a file, and its decomposition by LAPACK after centring and scaling."""

    def __init__(self, rows: int = 60, columns: int = 12, rank: int = 5, dtype: str = "float64", seed: int = 3) -> None:
        rng = np.random.default_rng(seed)
        stored = rng.standard_normal((rows, columns)) + np.arange(columns)
        if np.dtype(dtype).kind == "c":
            stored = stored + 1j * rng.standard_normal((rows, columns))
        self.stored, self.rank, self.dtype = stored, rank, np.dtype(dtype)
        self.shape = (rows, columns)
        self.mean = stored.mean(axis=0)
        self.scale = stored.std(axis=0, ddof=1)
        self.prepared = (stored - self.mean) / self.scale
        u, s, vh = np.linalg.svd(self.prepared, full_matrices=False)
        self.left, self.value, self.right = u[:, :rank], s[:rank], vh.conj().T[:, :rank]
        share = s**2 / np.sum(s**2)
        self.spectrum = {
            "value": s,
            "lower": 0.99 * s,
            "upper": np.where(np.arange(len(s)) < len(s) - 1, 1.01 * s, np.inf),
            "variance": s**2 / (rows - 1),
            "variance_share": share,
            "cumulative_share": np.cumsum(share),
        }
        self.certificate = Certificate(
            value=self.value,
            lower=0.99 * self.value,
            upper=1.01 * self.value,
            residual=1e-12 * self.value,
            state=np.resize(np.array([0, 0, 1, 2, 2], np.int8), rank),
            index_proved=np.arange(rank) < 2,
            angle_bound=np.where(np.arange(rank) < 2, 1e-6, np.nan),
            tied_first=np.arange(rank),
            tied_last=np.arange(rank),
            null=np.zeros(rank, bool),
            below_noise=np.zeros(rank, bool),
            missed_bound=float(s[rank]) if rank < len(s) else 0.0,
            missed_how="invented",
            failure_probability=1e-9,
            rounding=1e-13,
            rounding_how="proved",
            captured_share=float(share[:rank].sum()),
            total_energy=float(np.sum(s**2)),
            tolerance=1e-3,
            strict=False,
            tolerance_met=True,
            verdict="invented for a test",
            slices=(SliceCheck((0, 4), (2, 7), 3, 1e-15, 2e-15, True),),
        )
        self.attributes = {
            "source": "invented.h5:/frames",
            "seed": seed,
            "timings": {"sweep": 0.25, "unknown": float("nan"), "never": float("-inf")},
            "versions": {"numpy": np.__version__},
        }

    @property
    def parts(self) -> dict:
        """What `finish` wants."""
        return {
            "singular_values": self.value,
            "column_mean": self.mean,
            "column_scale": self.scale,
            "spectrum": self.spectrum,
            "certificate": self.certificate,
            "attributes": self.attributes,
        }

    def writer(self, out: Path | None, overwrite: bool = False) -> FactorsWriter:
        return FactorsWriter(out, shape=self.shape, rank=self.rank, dtype=self.dtype, overwrite=overwrite)

    def fill(self, writer: FactorsWriter, block: int = 7) -> None:
        """Stream both sides in blocks of so many rows."""
        for side, vectors in (("left", self.left), ("right", self.right)):
            for start in range(0, len(vectors), block):
                writer.write_vectors(side, start, vectors[start : start + block].astype(self.dtype))

    def write(self, out: Path | None, overwrite: bool = False, block: int = 7) -> Factors:
        with self.writer(out, overwrite) as writer:
            self.fill(writer, block)
            return writer.finish(**self.parts)


def small_chunks(monkeypatch, rows_each, most_files=400):
    """Cut vectors into many small chunks, as a large result would be."""

    def plan(rows, rank, itemsize):
        chunks = -(-rows // rows_each)
        return layout.VectorGrid(rows, rank, rows_each, -(-chunks // most_files))

    monkeypatch.setattr(writer, "plan_grid", plan)


KEPT_FACTORS = {"value": 1.0, "lower": 0.5, "upper": 2.0, "residual": 0.25}


def kept_sample(dtype: str) -> Sample:
    """What ``stores/format-1-DTYPE.zarr`` holds, computed without random numbers or LAPACK's choice of signs."""
    sample = Sample(6, 4, 2, dtype)
    sample.left = np.array([[3, 0], [0, 5], [4, 0], [0, 0], [0, 12], [0, 0]]) / np.array([5, 13])
    sample.right = np.array([[0, 1], [1, 0], [0, 0], [0, 0]], dtype=dtype)
    if sample.dtype.kind == "c":
        sample.left = sample.left * np.array([1, 1j])
    sample.value = np.array([8.0, 2.0])
    sample.mean = np.array([1.0, -2.0, 0.5, 0.0])
    sample.scale = np.array([1.0, 2.0, 4.0, 1.0])
    sample.spectrum = {name: np.array([8.0, 2.0, 1.0]) for name in sample.spectrum}
    sample.certificate = replace(
        sample.certificate,
        **{name: (sample.value * factor) for name, factor in KEPT_FACTORS.items()},
        missed_bound=1.5,
        captured_share=0.97,
        total_energy=70.0,
        left_defect=float("nan"),
    )
    sample.attributes = sample.attributes | {"versions": {"bigsvd": "0.1.0"}}
    return sample
