"""The basis, its products and what a Rayleigh–Ritz step on them gives."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from bigsvd.solve.dense import ROWS, split, triangle_svd
from bigsvd.sweep import Scratch


@dataclass(frozen=True, eq=False)
class Ritz:
    """A Rayleigh–Ritz step: AV = UΘ with V = BW.

    Attributes
    ----------
    theta : ndarray, shape (width,)
        Ritz values, decreasing.
    rotation : ndarray, shape (width, width)
        W.
    residual_gram : ndarray, shape (width, width)
        SᴴS for S = AᴴA V − V Θ².
    """

    theta: np.ndarray
    rotation: np.ndarray
    residual_gram: np.ndarray


@dataclass(eq=False)
class Chain:
    """Gaussian test vectors, and (I−P)AᴴA applied to them as often as the sweeps allow.

    Attributes
    ----------
    prefix : int
        P spans the first so many columns of the basis; it must not depend on the vectors.
    stream : int
        Stream of the Gaussian block.
    vectors : int
        Columns r.
    power : int
        How often (I−P)AᴴA was applied.
    tau : ndarray, shape (across, r), or None
        Present vectors, of spectral norm one; None before the first sweep.
    log_norm : float
        Logarithm of the norm they really have.
    lost : float
        What was lost on the way, relative to that norm.
    shrink : float
        Smallest factor on the entries of the Gaussian block.
    """

    prefix: int
    stream: int
    vectors: int
    power: int = 0
    tau: np.ndarray | None = None
    log_norm: float = 0.0
    lost: float = 0.0
    shrink: float = 1.0


@dataclass(frozen=True, eq=False)
class Aside:
    """A certified answer that is kept while the basis is begun again; its vectors wait in the last columns.

    Attributes
    ----------
    theta : ndarray, shape (rank,)
    map : ndarray, shape (stored columns, rank)
        As `Scratch.map`.
    mean_row : ndarray, shape (rank,)
    vectors : ndarray, shape (across, rank), or None
        Where the last columns are needed: the basis then spans nearly the whole space, which is small.
    """

    theta: np.ndarray
    map: np.ndarray
    mean_row: np.ndarray
    vectors: np.ndarray | None


@dataclass(eq=False)
class State:
    """Everything a block Krylov run carries from sweep to sweep.

    Attributes
    ----------
    basis, products : ndarray, shape (across, limit)
        Orthonormal columns B and Z = AᴴA B; the first `width` columns are in use.
    width : int
    triangle : ndarray, shape (width, width)
        R of the centred Y = AB.
    mean_row : ndarray, shape (width,)
        Constant row that centring takes from the stored Y.
    product_error : ndarray, shape (width,)
        Bound of the rounding of each column of Z.
    chains : list of Chain
    restarts : int
    """

    basis: np.ndarray
    products: np.ndarray
    width: int = 0
    triangle: np.ndarray = field(default_factory=lambda: np.zeros((0, 0)))
    mean_row: np.ndarray = field(default_factory=lambda: np.zeros(0))
    product_error: np.ndarray = field(default_factory=lambda: np.zeros(0))
    chains: list[Chain] = field(default_factory=list)
    restarts: int = 0

    @classmethod
    def empty(cls, across: int, limit: int, dtype: np.dtype) -> State:
        """State with no columns and room for `limit`."""
        return cls(np.zeros((across, limit), dtype, order="F"), np.zeros((across, limit), dtype, order="F"))

    @property
    def across(self) -> int:
        """Length of the basis vectors."""
        return len(self.basis)

    @property
    def used(self) -> np.ndarray:
        """The basis in use, shape (across, width)."""
        return self.basis[:, : self.width]

    @property
    def used_products(self) -> np.ndarray:
        """AᴴA times the basis in use."""
        return self.products[:, : self.width]

    def absorb(
        self,
        block: np.ndarray,
        products: np.ndarray,
        folded: np.ndarray,
        scratch: Scratch,
        error: np.ndarray,
        *,
        centred: bool,
        exact: bool,
    ) -> float:
        """Add the columns of a sweep.

        Parameters
        ----------
        block : ndarray, shape (across, b)
            The columns that were multiplied, in the coordinates of the prepared matrix.
        products : ndarray, shape (across, b)
            AᴴA times them.
        folded : ndarray
            Triangle of [1, Y_earlier, Y_new] (the column of ones only when centred).
        scratch : Scratch
            Its map is extended, and re-expressed where the block was not orthonormal.
        error : ndarray, shape (b,)
            Bound of the rounding of each column of `products`.
        centred : bool
        exact : bool
            The block is orthonormal as it stands; otherwise it was rounded or rescaled, and is written as
            block = B·H + Q·T, and everything computed from it is re-expressed for Q.

        Returns
        -------
        float
            ‖T⁻¹‖₂, by which rounding of the new Y grows; 1 where the block was exact.
        """
        new = block.shape[1]
        earlier = scratch.map
        scratch.map = np.zeros((earlier.shape[0] + new, earlier.shape[1] + new), earlier.dtype)
        scratch.map[: earlier.shape[0], : earlier.shape[1]] = earlier
        scratch.map[earlier.shape[0] :, earlier.shape[1] :] = np.eye(new)
        if centred:
            self.mean_row = folded[0, 1:] / folded[0, 0]
            self.triangle = folded[1:, 1:]
        else:
            self.mean_row = np.zeros(folded.shape[1], folded.dtype)
            self.triangle = folded
        columns = slice(self.width, self.width + new)
        if exact:
            self.basis[:, columns], self.products[:, columns] = block, products
            growth = 1.0
        else:
            q, inside, t = split(block, self.used)
            inverse = np.linalg.inv(t)
            self.basis[:, columns] = q
            self.products[:, columns] = (products - self.used_products @ inside) @ inverse
            change = np.eye(self.width + new, dtype=scratch.map.dtype)
            change[: self.width, self.width :] = -inside @ inverse
            change[self.width :, self.width :] = inverse
            self.triangle = self.triangle @ change
            self.mean_row = self.mean_row @ change
            scratch.map = scratch.map @ change
            error = np.abs(inverse).T @ error + np.abs(inside @ inverse).T @ self.product_error
            growth = float(np.linalg.norm(inverse, 2))
        self.product_error = np.concatenate([self.product_error, error])
        self.width += new
        return growth

    def forget(self, scratch: Scratch) -> None:
        """Drop all columns; what was stored for them is used no more."""
        scratch.map = np.zeros((scratch.stored, 0), scratch.dtype)
        self.width = 0
        self.triangle = np.zeros((0, 0), self.basis.dtype)
        self.mean_row = np.zeros(0, self.basis.dtype)
        self.product_error = np.zeros(0)
        self.chains = []

    def set_aside(self, rank: int, ritz: Ritz, scratch: Scratch, *, next_width: int) -> Aside:
        """Keep the leading Ritz vectors where the next basis, of so many columns, does not reach."""
        kept = ritz.rotation[:, :rank]
        if next_width + rank > self.basis.shape[1]:
            return Aside(ritz.theta[:rank], scratch.map @ kept, self.mean_row @ kept, self.used @ kept)
        place = slice(self.basis.shape[1] - rank, None)
        for first in range(0, self.across, ROWS):
            rows = slice(first, first + ROWS)
            self.basis[rows, place] = self.used[rows] @ kept
        return Aside(ritz.theta[:rank], scratch.map @ kept, self.mean_row @ kept, None)

    def take_back(self, aside: Aside, scratch: Scratch) -> Ritz:
        """Return to the answer that was set aside."""
        rank = len(aside.theta)
        there = self.basis[:, self.basis.shape[1] - rank :].copy() if aside.vectors is None else aside.vectors
        self.basis[:, :rank] = there
        self.width = rank
        self.triangle = np.diag(aside.theta).astype(self.basis.dtype)
        self.mean_row = aside.mean_row
        scratch.map = aside.map
        return Ritz(aside.theta, np.eye(rank, dtype=self.basis.dtype), np.zeros((rank, rank), self.basis.dtype))

    def ritz(self) -> Ritz:
        """Take the Rayleigh–Ritz step on the present basis."""
        theta, rotation = triangle_svd(self.triangle)
        gram = np.zeros((self.width, self.width), self.basis.dtype)
        for first in range(0, self.across, ROWS):
            part = self._residual_rows(slice(first, first + ROWS), theta, rotation)
            gram += part.conj().T @ part
        return Ritz(theta, rotation, gram)

    def residuals(self, ritz: Ritz, which: np.ndarray) -> np.ndarray:
        """Columns `which` of S = Z W − B W Θ², shape (across, number)."""
        out = np.empty((self.across, len(which)), self.basis.dtype)
        for first in range(0, self.across, ROWS):
            rows = slice(first, first + ROWS)
            out[rows] = self._residual_rows(rows, ritz.theta[which], ritz.rotation[:, which])
        return out

    def _residual_rows(self, rows: slice, theta: np.ndarray, rotation: np.ndarray) -> np.ndarray:
        """Some rows of Z W − B W Θ²."""
        part = self.used_products[rows] @ rotation
        part -= (self.used[rows] @ rotation) * theta**2
        return part

    def restart(self, keep: int, ritz: Ritz, scratch: Scratch) -> None:
        """Compress the basis to its leading Ritz vectors; nothing is multiplied again."""
        kept = ritz.rotation[:, :keep]
        for tall in (self.basis, self.products):
            for first in range(0, self.across, ROWS):
                rows = slice(first, first + ROWS)
                tall[rows, :keep] = tall[rows, : self.width] @ kept
        self.product_error = np.abs(kept).T @ self.product_error
        scratch.map = scratch.map @ kept
        self.mean_row = self.mean_row @ kept
        self.triangle = np.diag(ritz.theta[:keep]).astype(self.triangle.dtype)
        self.width = keep
        self.chains = []
        self.restarts += 1

    def basis_defect(self) -> float:
        """‖BᴴB − I‖_F."""
        return float(np.linalg.norm(self.used.conj().T @ self.used - np.eye(self.width)))
