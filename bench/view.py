"""Figures of one measured case as tables, pictures and goals want them, read from its record."""

from __future__ import annotations

import statistics
from dataclasses import dataclass
from typing import Any

from bench.measure import phase_times
from bigsvd.units import show_shape

SHORT_KINDS = {
    "hdf5-plain": "HDF5 plain f4",
    "hdf5-gzip": "HDF5 gzip u2",
    "hdf5-bitshuffle": "HDF5 bitshuffle u2",
    "zarr-zstd": "Zarr 3 zstd f4",
    "zarr-blosc": "Zarr 2 blosc f4",
}
SHORT_SPECTRA = {"exponential": "exponential", "inverse": "1/i", "inverse-root": "1/√i", "spikes": "spikes"}


def label(entry: dict[str, Any]) -> str:
    """A case in a few words."""
    shape = show_shape(tuple(entry["shape"]))
    return f"{SHORT_KINDS[entry['kind']]}, {shape}, {SHORT_SPECTRA[entry['spectrum']]}"


def seconds_and_error(candidate: dict[str, Any]) -> str:
    """A time, never without its error."""
    return f"{candidate['median_seconds']:.1f} s ({candidate['value_error']:.0e})"


@dataclass(frozen=True)
class View:
    """One case of the comparison, with its limits where they were measured."""

    entry: dict[str, Any]
    limits: dict[str, Any] | None

    @property
    def label(self) -> str:
        return label(self.entry)

    @property
    def own(self) -> dict[str, Any]:
        found: dict[str, Any] = self.entry["candidates"][0]
        return found

    @property
    def told(self) -> dict[str, Any]:
        """What bigsvd says of its last run."""
        found: dict[str, Any] = self.own["told"][-1]
        return found

    @property
    def peers(self) -> list[dict[str, Any]]:
        """Peers that ended, with their times."""
        return [each for each in self.entry["candidates"][1:] if "seconds" in each]

    @property
    def best(self) -> dict[str, Any] | None:
        """The fastest general-purpose setting of equal error."""
        return next((each for each in self.peers if each["name"] == self.entry["best"]), None)

    @property
    def least_ratio(self) -> float:
        """The ratio; where no peer comes as near, that of the nearest, which would need longer; infinite for none."""
        shown = self.best or self.nearest
        return float("inf") if shown is None else float(shown["median_seconds"] / self.own["median_seconds"])

    def resident_best(self, ceiling: int) -> dict[str, Any] | None:
        """The fastest of equal error that stays below the ceiling with its mapped files too."""
        fit = [
            each
            for each in self.peers
            if each["value_error"] <= self.entry["target_error"]
            and max(each["peak_bytes"]) <= ceiling
            and not each["centred"]
            and not each["others_pipeline"]
        ]
        return min(fit, key=lambda each: each["median_seconds"], default=None)

    @property
    def nearest(self) -> dict[str, Any] | None:
        """The peer of least error, where none has as little as bigsvd."""
        fit = [each for each in self.peers if not each["centred"]]
        return min(fit, key=lambda each: each["value_error"], default=None)

    @property
    def reads(self) -> float:
        """Decoded bytes read over those of the matrix: pilot, probe and slices included."""
        return float(self.told["bytes_read"] / self.told["matrix_bytes"])

    @property
    def peak(self) -> int:
        return max(self.own["peak_bytes"])

    @property
    def closeness(self) -> float | None:
        """With all workers."""
        if self.limits is None:
            return None
        most = max(self.limits["workers"], key=int)
        return float(self.limits["workers"][most]["closeness"])

    @property
    def inside_seconds(self) -> float:
        """Of the decomposition itself, without the start of the interpreter: median."""
        return statistics.median(told["seconds"] for told in self.own["told"])

    @property
    def predicted_seconds(self) -> float | None:
        """Before the run, median over the runs; None where nothing was probed."""
        return self._median("predicted_seconds")

    @property
    def pilot_predicted_seconds(self) -> float | None:
        """Once the pilot had shown the spectrum, median over the runs; None where it did not tell."""
        return self._median("pilot_predicted_seconds")

    def _median(self, name: str) -> float | None:
        found = [told[name] for told in self.own["told"] if told.get(name) is not None]
        return statistics.median(found) if found else None

    def stages(self) -> dict[str, float]:
        """Wall seconds of every stage, medians over the runs."""
        return stages_of(self.own)

    def phases(self) -> list[tuple[str, float, float]]:
        """(phase, predicted for the sweeps that were made, measured), medians over the runs."""
        runs = [phase_times(told) for told in self.own["told"]]
        return [
            (mine[0][0], statistics.median(each[1] for each in mine), statistics.median(each[2] for each in mine))
            for mine in zip(*runs, strict=True)
        ]


def stages_of(run: dict[str, Any]) -> dict[str, float]:
    """Wall seconds of every stage of a candidate that is bigsvd, medians over its runs."""
    runs = [told["timings"] for told in run["told"]]
    return {stage: statistics.median(each.get(stage, 0.0) for each in runs) for stage in runs[-1]}
