"""The journal of a run: what every wave has added up, kept so that a run that was cut goes on with the same bits.

Everything between sweeps follows from their sums, so these are all that is kept (and Y, in scratch). A run that goes on
begins as any other; where the journal knows the sums of a sweep, or of its first waves, they are not read again.

    OUT.run/identity.json              what the run is: input, options, plan, versions
    OUT.run/pilot                      what the pilot found
    OUT.run/sums-CC-WWWWW              sums after WWWWW waves of sweep CC; of each sweep the last, and the one before
    OUT.run/scratch/                   Y, unless --scratch names another place
    OUT.run/status.json                for whoever watches
"""

from __future__ import annotations

import re
import time
from collections.abc import Callable
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from bigsvd.errors import OptionError
from bigsvd.journal.record import DamagedRecordError, read_facts, read_record, write_record
from bigsvd.journal.sums import from_partial, from_pilot, to_partial, to_pilot
from bigsvd.prepare import Preparation
from bigsvd.solve import Pilot
from bigsvd.sweep import Control, Partial

PILOT = "pilot"
_NAME = re.compile(r"sums-(\d{2,})-(\d{5,})")
# Saving may take this share of a run; slow devices are written less often, but once a minute at least.
SHARE_OF_TIME = 1 / 40
LONGEST_GAP = 60.0
# What took less is read again rather than kept.
WORTH_KEEPING = 1.0
Flush = Callable[[], None]


@dataclass(frozen=True)
class Saved:
    """One set of sums on the device.

    Attributes
    ----------
    path : Path
    sweep : int
        Which sweep of the run, from 1.
    waves : int
        How many of its waves are in the sums.
    """

    path: Path
    sweep: int
    waves: int


class Journal:
    """Keeps the sums of a run's sweeps, and hands out what an earlier process kept.

    Parameters
    ----------
    folder : Path
        OUT.run, ours alone.
    control : Control
        Counts bytes; says what is going on.
    every : float
        Seconds between two savings, where saving is quick.
    clock : callable
        Steady seconds.

    Attributes
    ----------
    damaged : list of str
        Records that could not be used, and why.
    saved_seconds : float
        Time spent on saving.
    saved_at : float or None
        When something was kept last, by an earlier process or this one, seconds since 1970.
    """

    def __init__(
        self, folder: Path, control: Control, *, every: float, clock: Callable[[], float] = time.perf_counter
    ) -> None:
        self.folder, self.every = folder, every
        self.damaged: list[str] = []
        self.saved_seconds = 0.0
        self._control, self._clock = control, clock
        self._last, self._took = clock(), 0.0
        self._began = clock()
        self._earlier = self._facts_of_earlier()
        self.saved_at: float | None = self._earlier.get("saved")
        control.bytes_read += int(self._earlier.get("bytes_read", 0))
        self._calls = 0

    @property
    def earlier_seconds(self) -> float:
        """Time that earlier processes spent on the run up to their last saving."""
        return float(self._earlier.get("seconds", 0.0))

    @property
    def resumed(self) -> int:
        """How often the run was cut and gone on with."""
        return int(self._earlier.get("resumed", -1)) + 1

    def saved(self) -> list[Saved]:
        """All sums on the device, by sweep and wave."""
        return saved_in(self.folder)

    def pilot(self, preparation: Preparation) -> Pilot | None:
        """What the pilot found, if it was kept."""
        read = self._read(self.folder / PILOT)
        return None if read is None else to_pilot(*read, preparation)

    def keep_pilot(self, pilot: Pilot) -> None:
        """Keep what the pilot found, unless that was quick."""
        if self.due(whole=True):
            self._write(self.folder / PILOT, *from_pilot(pilot))

    def next_sweep(self, flush: Flush, mark: str) -> SweepJournal:
        """The journal of the next sweep of this process.

        Parameters
        ----------
        flush : callable
            Brings its scratch to the device.
        mark : str
            Of the scratch that it writes; sums that an earlier process kept beside another are read again.
        """
        self._calls += 1
        return SweepJournal(self, self._calls, flush, mark)

    def due(self, *, whole: bool) -> bool:
        """Whether it is time to save; what a whole sweep or pilot found is kept sooner."""
        gap = min(self.every, WORTH_KEEPING) if whole else max(self.every, min(self._took / SHARE_OF_TIME, LONGEST_GAP))
        return self._clock() - self._last >= gap

    def _read(self, path: Path) -> tuple[dict[str, Any], dict[str, Any]] | None:
        """Read a record; a damaged one counts as none, and is named."""
        try:
            return read_record(path)
        except FileNotFoundError:
            return None
        except (DamagedRecordError, OSError) as error:
            self.damaged.append(str(error))
            return None

    def _write(self, path: Path, facts: dict[str, Any], arrays: dict[str, Any], flush: Flush | None = None) -> None:
        """Bring to the device what a record rests on, then the record, and note how long that took."""
        start = self._clock()
        if flush is not None:
            flush()
        counts = {"bytes_read": self._control.bytes_read, "seconds": self.earlier_seconds + start - self._began}
        counts["resumed"] = self.resumed
        saved = time.time()
        write_record(path, facts | {"run": counts | {"saved": saved}}, arrays)
        self.saved_at = saved
        self._last = self._clock()
        self._took = self._last - start
        self.saved_seconds += self._took

    def _facts_of_earlier(self) -> dict[str, Any]:
        """Bytes and seconds at the last saving of an earlier process."""
        latest: dict[str, Any] = {}
        for path in [self.folder / PILOT, *(each.path for each in self.saved())]:
            with suppress(DamagedRecordError, OSError, KeyError, TypeError):
                run = read_facts(path)["run"]
                if run["saved"] >= latest.get("saved", 0.0):
                    latest = run
        return latest


class SweepJournal:
    """The sums of one sweep, kept after its waves.

    Parameters
    ----------
    journal : Journal
    sweep : int
        Which sweep of the run, from 1; sweeps that are made again count.
    flush : callable
        Brings scratch to the device: sums are worth nothing without the Y that belongs to them.
    mark : str
        Of that Y.
    """

    def __init__(self, journal: Journal, sweep: int, flush: Flush, mark: str) -> None:
        self._journal, self._sweep, self._flush, self._mark = journal, sweep, flush, mark

    def begin(self) -> tuple[int, Partial | None]:
        """Waves that need not be read again, and their sums."""
        for each in reversed(self._journal.saved()):
            if each.sweep == self._sweep:
                read = self._journal._read(each.path)
                if read is not None and read[0].get("mark") == self._mark:
                    return each.waves, to_partial(*read)
                # Of no more use: without its Y, or not whole.
                each.path.unlink(missing_ok=True)
        return 0, None

    def keep(self, waves: int, of: int, total: Partial, *, stopping: bool = False) -> None:
        """Keep the sums of the first `waves` of `of` waves, if it is time; of a whole sweep, unless it was short."""
        if not self._journal.due(whole=stopping or waves == of):
            return
        facts, arrays = from_partial(total)
        path = self._journal.folder / f"sums-{self._sweep:02d}-{waves:05d}"
        self._journal._write(path, facts | {"waves": waves, "of": of, "mark": self._mark}, arrays, self._flush)
        self._forget_older(waves)

    def _forget_older(self, waves: int) -> None:
        """Remove all of this sweep but the sums just kept and the ones before."""
        own = [each for each in self._journal.saved() if each.sweep == self._sweep and each.waves <= waves]
        for each in own[:-2]:
            each.path.unlink(missing_ok=True)


def check_interval(seconds: float) -> None:
    """Refuse a time between two savings that is none.

    Raises
    ------
    OptionError
    """
    if not seconds >= 0:
        raise OptionError(
            f"--save-every must be a number of seconds, 0 or more, not {seconds!r}", remedy="Try --save-every 5."
        )


def saved_in(folder: Path) -> list[Saved]:
    """All sums that a run folder holds, by sweep and wave."""
    found = []
    for path in folder.glob("sums-*"):
        if match := _NAME.fullmatch(path.name):
            found.append(Saved(path, int(match[1]), int(match[2])))
    return sorted(found, key=lambda each: (each.sweep, each.waves))
