"""Deviations learnt in a sweep of single precision are those of the file: they define the matrix that is decomposed."""

from __future__ import annotations

import importlib

import numpy as np
import pytest
import scipy.linalg

import bigsvd


def counts(*, drift: float) -> np.ndarray:
    """Invented counts: five directions, noise, and a drift down the file that no sample of it knows."""
    random = np.random.default_rng(4)
    lines, across = 3000, 60
    signal = random.standard_normal((lines, 5)) @ np.diag(0.6 ** np.arange(5)) @ random.standard_normal((5, across))
    values = 20000 + 900 * signal + 40 * random.standard_normal((lines, across))
    return np.round(values + drift * np.linspace(-1, 1, lines)[:, None]).astype(np.uint16)


@pytest.mark.parametrize("center", ["features", "none"])
@pytest.mark.parametrize("drift", [0.0, 4000.0])
def test_stored_deviations_are_exact(drift: float, center: str) -> None:
    matrix = counts(drift=drift)
    factors = bigsvd.decompose(
        matrix, rank=4, center=center, scale="unit", route="krylov", axis="rows", precision="single",
        panel_lines=128, memory="1GiB", max_sweeps=1,
    )  # fmt: skip
    assert factors.attributes["precision"] == "single"
    exact = matrix.astype(np.longdouble).std(axis=0, ddof=1)
    np.testing.assert_allclose(np.asarray(factors.column_scale[:]), exact.astype(float), rtol=1e-12)


def test_a_run_that_goes_over_to_double_states_nothing_of_other_deviations(monkeypatch: pytest.MonkeyPatch) -> None:
    # The pilot is made to choose single, which cannot reach 1e-8; the sweeps in double that follow rest on deviations
    # learnt before, and prove intervals a thousand times narrower than the roundoff of single.
    run = importlib.import_module("bigsvd.drive.run")
    monkeypatch.setattr(run, "single_is_enough", lambda *pilot, strict: True)
    matrix = counts(drift=4000.0)
    factors = bigsvd.decompose(
        matrix, rank=4, scale="unit", center="none", route="krylov", axis="rows", tolerance=1e-8, panel_lines=128,
        memory="1GiB",
    )  # fmt: skip
    assert factors.attributes["precision"] == "double"
    assert any("double precision from sweep" in remark for remark in factors.attributes["remarks"])
    wide = matrix.astype(np.float64)
    true = scipy.linalg.svd(wide / wide.std(axis=0, ddof=1), compute_uv=False)[:4]
    certificate = factors.certificate
    assert certificate.index_proved.all()
    assert np.all(certificate.upper - certificate.lower <= 1e-9 * true)
    slack = 1e-13 * true[0]
    assert np.all(certificate.lower <= true + slack)
    assert np.all(true <= certificate.upper + slack)
