"""Certificates and run records made by hand, whose words are known."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np

from bigsvd.certify import STATES, Certificate, SliceCheck


def certificate(rank: int = 3, **changes: Any) -> Certificate:
    """Values 100, 50, 33.3…, each within a millionth, all resolved."""
    value = 100.0 / np.arange(1, rank + 1)
    plain = Certificate(
        value=value,
        lower=value * (1 - 1e-6),
        upper=value * (1 + 1e-6),
        residual=value * 1e-6,
        state=np.zeros(rank, np.int8),
        index_proved=np.ones(rank, bool),
        angle_bound=np.full(rank, 1e-3),
        tied_first=np.arange(rank),
        tied_last=np.arange(rank),
        null=np.zeros(rank, bool),
        below_noise=np.zeros(rank, bool),
        missed_bound=1.234,
        missed_how="20 Gaussian test vectors, power 2 of AᴴA",
        failure_probability=1e-10,
        rounding=1.2e-9,
        rounding_how="proved",
        captured_share=0.9,
        total_energy=float(np.sum(value**2) / 0.9),
        tolerance=1e-3,
        strict=False,
        tolerance_met=True,
        verdict=f"{rank} of {rank} components resolved to 0.001; order proved for all",
        left_defect=1e-15,
        right_defect=2e-15,
        slices=(SliceCheck((0, 100), (20, 60), 5, 1e-15, 1e-9, True),),
    )
    return replace(plain, **changes)


def states(*words: str) -> np.ndarray:
    return np.array([STATES.index(word) for word in words], np.int8)


def attributes(**changes: Any) -> dict[str, Any]:
    """What a run of 4 × 2 GiB over a 2 GiB matrix recorded."""
    plain: dict[str, Any] = {
        "source": {"name": "pool.h5:/frames", "shape": [20000, 26844], "dtype": "float32", "decoded_bytes": 2 << 30},
        "preparation": {
            "words": "samples: rows (20,000); features: columns (26,844); centred per column",
            "center": "features",
            "constant_features": 0,
        },
        "plan": {"route": "krylov", "axis": "rows", "resident": False},
        "sweeps": 4,
        "bytes_read": 9 << 30,
        "matrix_bytes": 2 << 30,
        "seconds": 75.0,
        "predicted_seconds": 70.0,
        "peak_resident_bytes": 600 << 20,
        "memory_bytes": 1 << 30,
        "planned_bytes": 700 << 20,
        "workers": 2,
        "precision": "double",
        "seed": 0,
        "remarks": [],
    }
    return plain | changes
