"""An invented night at an invented tide pool: what glows, what is dissolved, and how strongly, as data.

Nothing here was measured. Quillen Pool, its animals, its camera and its water sampler do not exist; they give
two matrices a structure that is known exactly:

    A = 1·offsetᵀ + courses·shapesᵀ + noise

night_watch   frames × pixels: six kinds of animal, each a patch of the image with a glow that swells and fades
tide_water    samples × compounds: eight sources that flavour the water, each with its own blend of compounds
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np

from bigsvd.demo.blocks import block_random

INVENTED = (
    "Invented data. Quillen Pool, its animals, its camera and its water sampler do not exist; "
    "the structure in this matrix was planted and is known."
)
SEED = 20_417

FRAME_HEIGHT, FRAME_WIDTH = 160, 256
FRAMES = 20_000
FRAME_NOISE = 6.0  # counts, standard deviation

SAMPLES, COMPOUNDS = 50_000, 8_192
SAMPLE_NOISE = 0.5


@dataclass(frozen=True)
class Glow:
    """One kind of animal: where it sits, and how its light goes through the night.

    Attributes
    ----------
    animal : str
    strength : float
        Counts at the middle of a patch when the glow is full at nightfall.
    patches : tuple of (row, column, width)
        Round spots in pixels of the frame; width is the Gaussian one.
    pulses : float
        Swellings in a night.
    phase : float
        Share of a pulse already gone at nightfall.
    fading : float
        The light changes by exp(−fading) from nightfall to dawn; negative grows.
    """

    animal: str
    strength: float
    patches: tuple[tuple[float, float, float], ...]
    pulses: float
    phase: float
    fading: float


GLOWS = (
    Glow("lampweed", 98.0, ((48, 60, 13), (70, 88, 10)), pulses=3, phase=0.0, fading=0.4),
    Glow("bell snails", 87.0, ((112, 180, 12), (124, 212, 9)), pulses=5, phase=0.3, fading=1.1),
    Glow("glass urchins", 39.0, ((30, 200, 11),), pulses=8, phase=0.1, fading=-0.5),
    Glow("ember worms", 35.0, ((130, 40, 7), (120, 66, 6), (142, 84, 6)), pulses=13, phase=0.6, fading=0.2),
    Glow("thread stars", 24.0, ((80, 140, 7), (88, 124, 5)), pulses=21, phase=0.8, fading=0.0),
    Glow("moon fleas", 24.0, ((20, 120, 6), (28, 136, 4)), pulses=34, phase=0.4, fading=0.7),
)


@dataclass(frozen=True)
class Flavour:
    """One source of what is dissolved in the water.

    Attributes
    ----------
    source : str
    strength : float
        Norm of its part of a typical sample.
    peaks : int
        Compounds around which its blend gathers.
    tides : float
        Swellings along the sampled shore and night; how it goes on is chance.
    """

    source: str
    strength: float
    peaks: int
    tides: float


FLAVOURS = (
    Flavour("open sea", 200.0, 60, 2),
    Flavour("spring under the ledge", 128.0, 25, 3),
    Flavour("lampweed", 83.0, 40, 5),
    Flavour("bell snails", 54.0, 30, 7),
    Flavour("rotting kelp", 35.0, 50, 11),
    Flavour("glass urchins", 22.5, 20, 13),
    Flavour("blue clay", 15.0, 35, 17),
    Flavour("rain", 10.0, 15, 19),
)


@dataclass(frozen=True, eq=False)
class Planted:
    """A matrix before its noise: offset of every column, plus a product of two thin matrices.

    Attributes
    ----------
    name : str
    offset : ndarray, shape (n,)
    courses : ndarray, shape (m, K)
        How each component goes along the rows.
    shapes : ndarray, shape (n, K)
        How each component lies over the columns.
    noise : float
        Standard deviation of the independent noise of every entry, rounding included.
    """

    name: str
    offset: np.ndarray
    courses: np.ndarray
    shapes: np.ndarray
    noise: float

    @property
    def shape(self) -> tuple[int, int]:
        """Rows and columns of the matrix."""
        return len(self.courses), len(self.shapes)

    @property
    def rank(self) -> int:
        """Number of planted components K."""
        return int(self.courses.shape[1])

    def block(self, rows: slice, columns: slice) -> np.ndarray:
        """Return the noiseless entries of a rectangle, single precision."""
        product: np.ndarray = self.courses[rows].astype("f4") @ self.shapes[columns].astype("f4").T
        product += self.offset[columns].astype("f4")
        return product

    def factors(self) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Decompose the planted part as it is once its columns are centred, without forming it.

        Returns
        -------
        left : ndarray, shape (m, K)
        values : ndarray, shape (K,)
        right : ndarray, shape (n, K)
            courses − mean = Q₁R₁ and shapes = Q₂R₂ give the SVD of R₁R₂ᵀ, K × K.
        """
        first, first_r = np.linalg.qr(self.courses - self.courses.mean(axis=0))
        second, second_r = np.linalg.qr(self.shapes)
        left, values, right = np.linalg.svd(first_r @ second_r.T)
        return first @ left, values, second @ right.T


def night_watch(scale: float = 1.0) -> Planted:
    """Return the imaging stack, 20,000 frames × 40,960 pixels; `scale` watches the same night in fewer frames."""
    frames = max(2 * len(GLOWS), round(FRAMES * scale))
    night = (np.arange(frames) + 0.5) / frames
    row, column = np.mgrid[:FRAME_HEIGHT, :FRAME_WIDTH]
    courses = np.stack(
        [np.exp(-g.fading * night) * (1 + np.sin(2 * np.pi * (g.pulses * night + g.phase))) / 2 for g in GLOWS], axis=1
    )
    shapes = np.stack([g.strength * _spots(row, column, g.patches).ravel() for g in GLOWS], axis=1)
    rock = 90 + 0.15 * row + 40 * _spots(row, column, [(100, 150, 45)]) + 30 * _spots(row, column, [(40, 40, 60)])
    # Rounding to whole counts adds the variance 1/12 of a uniform unit interval.
    return Planted("night_watch", rock.ravel(), courses, shapes, float(np.sqrt(FRAME_NOISE**2 + 1 / 12)))


def tide_water(scale: float = 1.0) -> Planted:
    """Return the water matrix, 50,000 samples × 8,192 compounds; `scale` takes fewer samples."""
    samples = max(2 * len(FLAVOURS), round(SAMPLES * scale))
    time = (np.arange(samples) + 0.5) / samples
    chance = block_random(SEED, "tide_water courses", 0)
    courses = np.stack([np.cos(2 * np.pi * f.tides * time) + chance.standard_normal(samples) for f in FLAVOURS], axis=1)
    blend = block_random(SEED, "tide_water shapes", 0)
    shapes = np.stack([f.strength * _blend(blend, f.peaks) for f in FLAVOURS], axis=1)
    offset = block_random(SEED, "tide_water offset", 0).lognormal(2.0, 1.0, COMPOUNDS)
    return Planted("tide_water", offset, courses / np.sqrt(1.5), shapes, SAMPLE_NOISE)


def _spots(row: np.ndarray, column: np.ndarray, places: Iterable[tuple[float, float, float]]) -> np.ndarray:
    """Draw round Gaussian spots of height 1, each given by its middle row, middle column and width."""
    picture = np.zeros(row.shape)
    for middle_row, middle_column, width in places:
        picture += np.exp(-((row - middle_row) ** 2 + (column - middle_column) ** 2) / (2 * width**2))
    return picture


def _blend(chance: np.random.Generator, peaks: int) -> np.ndarray:
    """Draw a profile over the compounds: signed peaks at random places, unit norm."""
    compound = np.arange(COMPOUNDS)
    profile = np.zeros(COMPOUNDS)
    for _ in range(peaks):
        height, place, width = chance.standard_normal(), chance.uniform(0, COMPOUNDS), chance.uniform(4, 40)
        profile += height * np.exp(-(((compound - place) / width) ** 2) / 2)
    unit: np.ndarray = profile / np.linalg.norm(profile)
    return unit
