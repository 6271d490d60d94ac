"""What stands beside bigsvd: every general-purpose setting, the tuned ones and those a user would write first."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

from bench.cases import Case
from bench.measure import Candidate
from bigsvd.units import show_bytes

# More power iterations, or steps of LOBPCG, are not tried.
MOST_ITERATIONS = 12
# Bands of the direct tall-skinny SVD must be several times as tall as wide, else its triangles are as large as the
# matrix; two threads hold each with the copies of LAPACK's QR.
DIRECT_ASPECT, DIRECT_COPIES = 4, 6
# Wider batches cost IncrementalPCA in proportion to their rows; a narrow matrix is best taken in its own default.
SMALL_BATCH, WIDE_COLUMNS = 200, 1_000
# LAPACK's SVD holds the matrix in double, its copy, and U.
WHOLE_COPIES = 3.5


@dataclass(frozen=True)
class Family:
    """One library function with a number of iterations that must be found.

    Attributes
    ----------
    name : str
    make : callable
        Candidate of so many iterations, in single or in double.
    least : int
        Fewest iterations it takes.
    in_double : bool
        Whether double can be asked for where single does not reach the error.
    slow : bool
        Left to ``--slow``.
    """

    name: str
    make: Callable[[int, bool], Candidate]
    least: int = 0
    in_double: bool = False
    slow: bool = False


def families(case: Case, *, centred: bool) -> list[Family]:
    """Functions of which the fewest iterations that reach an error are searched, each at its fastest settings."""
    return [
        Family("dask", dask_tuned, in_double=True),
        Family("randomized", _randomized_tuned(_array_of(case, centred=centred))),
        Family("lobpcg", _lobpcg, least=1, slow=True),
    ]


def dask_tuned(iterations: int, double: bool) -> Candidate:
    """svd_compressed at its fastest here: QR, bands of 16 MB, the file read again in every iteration, no BLAS threads.

    dask brings the threads; with OpenBLAS's own on top it took up to ten times as long.
    """
    words = ["dask", "--iterator", "QR", "--iterations", str(iterations), "--compute"]
    name = f"dask svd_compressed, QR, {_count(iterations)}{', double' if double else ''}"
    return Candidate(name, words + (["--double"] if double else []), one_blas_thread=True)


def _array_of(case: Case, *, centred: bool) -> str:
    """What a function that takes arrays is given: the file where it can be mapped, else a copy in a mapped file."""
    return "memory map" if case.kind == "hdf5-plain" and not centred else "decoded copy"


def _randomized_tuned(on: str) -> Callable[[int, bool], Candidate]:
    """randomized_svd on the mapped file, or on a copy that is decoded once; QR keeps single from overflowing."""

    def make(iterations: int, double: bool) -> Candidate:
        name = f"scikit-learn randomized_svd, {on}, QR, {_count(iterations)}"
        return Candidate(name, ["randomized", "--iterations", str(iterations), "--normalizer", "QR"])

    return make


def _lobpcg(iterations: int, double: bool) -> Candidate:
    """Svds by LOBPCG, which reads the file once for a whole block of vectors where ARPACK reads it for each."""
    words = ["svds", "--solver", "lobpcg", "--iterations", str(iterations)]
    return Candidate(f"SciPy svds, LOBPCG, {_count(iterations, 'step')}, operator that reads", words)


def variants(case: Case, best: Candidate | None, *, double: bool, centred: bool) -> list[Candidate]:
    """The same beside the tuned dask setting: what a user writes first, held in memory, through the Rust pipeline."""
    found = [
        Candidate("dask svd_compressed, all defaults", ["dask", "--auto-chunks"], first_written=True),
    ]
    if best is not None:
        iterations = int(best.arguments[best.arguments.index("--iterations") + 1])
        lazy = [word for word in best.arguments if word != "--compute"]
        # Powers of AᴴA without QR between overflow single at many iterations.
        power = ["power" if word == "QR" else word for word in best.arguments]
        defaults = ["dask", "--auto-chunks", "--iterator", "QR", "--iterations", str(iterations)]
        found += [
            Candidate(
                f"dask svd_compressed, defaults but QR, {_count(iterations)}",
                defaults + (["--double"] if double else []),
                first_written=True,
            ),
            Candidate(f"{best.name}, compute=False", lazy, one_blas_thread=True),
            Candidate(best.name.replace("QR", "power (its default)"), power, one_blas_thread=True),
        ]
        if case.kind.startswith("zarr"):
            found.append(
                Candidate(
                    f"{best.name}, Rust pipeline",
                    [*best.arguments, "--rust"],
                    one_blas_thread=True,
                    others_pipeline=True,
                )
            )
    on = _array_of(case, centred=centred)
    found.append(
        Candidate(f"scikit-learn randomized_svd, {on}, all defaults", ["randomized"], first_written=True),
    )
    return found


def slow_ones(case: Case, ceiling: int, available_bytes: int) -> tuple[list[Candidate], list[tuple[str, str]]]:
    """What takes minutes, and (name, why) of what this case leaves no room for."""
    small = SMALL_BATCH if case.columns > WIDE_COLUMNS else 5 * case.columns
    found = [Candidate("SciPy svds, ARPACK (its default), operator that reads", ["svds"], first_written=True)]
    for batch, first in ((small, False), (1_000, True)):
        name = f"scikit-learn IncrementalPCA, centred, batches of {batch:,} rows"
        words = ["incremental", "--batch", str(batch)]
        found.append(Candidate(name, words, centred=True, first_written=first))
    left_out = []
    band = DIRECT_ASPECT * case.columns**2 * 4
    if DIRECT_COPIES * band <= ceiling:
        found.append(Candidate("dask svd, direct tall-skinny", ["dask-svd"], one_blas_thread=True))
    else:
        why = f"with {case.columns:,} columns its bands take {show_bytes(band)} each, several at a time"
        left_out.append(("dask svd", why))
    needed = WHOLE_COPIES * case.rows * case.columns * 8
    if needed <= available_bytes:
        found.append(Candidate("NumPy svd, whole matrix in memory, double", ["numpy"], first_written=True))
    else:
        left_out.append(("NumPy svd in memory", f"it would hold about {show_bytes(needed)}"))
    return found, left_out


def _count(iterations: int, word: str = "iteration") -> str:
    return f"{iterations} {word}{'' if iterations == 1 else 's'}"
