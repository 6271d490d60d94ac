"""How near the planted structure was found, against how near the noise lets anyone come."""

from __future__ import annotations

from pathlib import Path
from typing import Any, NamedTuple, Protocol

import numpy as np

from bigsvd.errors import OptionError, SourceError


class FoundFactors(Protocol):
    """The parts of a result that are compared; arrays in memory or on disk."""

    @property
    def left_vectors(self) -> Any:
        """Left singular vectors, shape (m, k)."""
        ...

    @property
    def singular_values(self) -> Any:
        """Singular values, shape (k,)."""
        ...

    @property
    def right_vectors(self) -> Any:
        """Right singular vectors, shape (n, k)."""
        ...


class Agreement(NamedTuple):
    """One planted component beside the one found.

    Attributes
    ----------
    component : int
        From 1.
    planted_value, found_value : float
        Singular value of the centred planted part, and of the noisy matrix.
    angle : float
        Degrees between planted and found vector, the larger of left and right.
    expected_value, expected_angle : float
        What the exact decomposition of the noisy matrix gives, to within the chance of one draw of the noise.
    spread : float
        Standard deviation of that chance in the value: of uᵀNv, the noise of one entry.
    """

    component: int
    planted_value: float
    found_value: float
    angle: float
    expected_value: float
    expected_angle: float
    spread: float

    @property
    def as_expected(self) -> bool:
        """Whether the value is within 5 spreads and 1e-3 of the expected one, and the angle at most a tenth above it.

        1e-3 is the default tolerance of a decomposition; the angle may be 0.1° more, where it is small.
        """
        apart = abs(self.found_value - self.expected_value)
        near = apart <= 5 * self.spread + 1e-3 * self.expected_value
        return near and self.angle <= 1.1 * self.expected_angle + 0.1


def compare_with_planted(factors: FoundFactors, folder: Path, which: str) -> list[Agreement]:
    """Compare factors with what was planted in a demo matrix.

    Parameters
    ----------
    factors : Factors
        Of the demo matrix with its columns centred.
    folder : Path
        Where the demo was written.
    which : str
        ``night_watch`` or ``tide_water``.

    Returns
    -------
    list of Agreement
        One for every planted component that the factors are long enough to show.

    Raises
    ------
    SourceError
        If there is no ``planted.npz`` in the folder.
    OptionError
        If there is no such matrix, or the factors belong to one of another shape.
    """
    path = Path(folder) / "planted.npz"
    try:
        arrays = np.load(path)
    except OSError as error:
        raise SourceError(
            f"{path} cannot be read: {error}", remedy=f"Write the demo first: bigsvd demo {folder}"
        ) from error
    with arrays:
        if f"{which}_singular_values" not in arrays:
            raise OptionError(f"the demo has no matrix {which!r}", remedy="Name night_watch or tide_water.")
        left, values, right = (
            arrays[f"{which}_{part}"] for part in ("left_vectors", "singular_values", "right_vectors")
        )
        noise = float(arrays[f"{which}_noise"])

    found = np.asarray(factors.singular_values[:])
    count = min(len(values), len(found))
    found_left, found_right = factors.left_vectors, factors.right_vectors
    if (found_left.shape[0], found_right.shape[0]) != (len(left), len(right)):
        raise OptionError(
            f"the factors are of a matrix {found_left.shape[0]} × {found_right.shape[0]}, "
            f"but {which} is {len(left)} × {len(right)}",
            remedy=f"Write the demo and decompose it again: bigsvd demo {folder}",
        )
    angles = np.maximum(
        _angles(left[:, :count], np.asarray(found_left[:, :count])),
        _angles(right[:, :count], np.asarray(found_right[:, :count])),
    )
    table = []
    for i in range(count):
        expected = _expected(float(values[i]), noise, len(left), len(right))
        table.append(Agreement(i + 1, float(values[i]), float(found[i]), float(angles[i]), *expected, noise))
    return table


def _angles(one: np.ndarray, other: np.ndarray) -> np.ndarray:
    """Degrees between columns of unit norm, accurate for small angles too."""
    along = np.sum(one * other, axis=0)
    across = np.linalg.norm(other - one * along, axis=0)
    degrees: np.ndarray = np.degrees(np.arctan2(across, np.abs(along)))
    return degrees


def _expected(value: float, noise: float, m: int, n: int) -> tuple[float, float]:
    """Value and larger angle to expect for a planted value in Gaussian noise, as m and n grow.

    Method: Benaych-Georges, Nadakuditi, J. Multivariate Anal. 111 (2012), for a matrix whose entries have variance 1/n.
    """
    theta, c = value / (noise * np.sqrt(n)), m / n
    if theta**4 <= c:
        return float(noise * (np.sqrt(m) + np.sqrt(n))), 90.0
    shown = noise * np.sqrt(n) * np.sqrt((1 + theta**2) * (c + theta**2)) / theta
    left = c * (1 + theta**2) / (theta**2 * (theta**2 + c))
    right = (c + theta**2) / (theta**2 * (theta**2 + 1))
    return float(shown), float(np.degrees(np.arcsin(np.sqrt(max(left, right)))))
