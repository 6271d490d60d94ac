"""A run that can be gone on with: its folder, its journal, and what stays of them when it ends."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from contextlib import contextmanager, suppress
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from bigsvd.drive.space import Need, full_device_named, require_room
from bigsvd.errors import DamagedJournalError, NonFiniteError, OptionError
from bigsvd.factors import store_cost
from bigsvd.journal import Journal, RunFolder, Standing, identity_of, journal_bytes, read_standing
from bigsvd.plan import Plan
from bigsvd.sweep import Control

# The same command would end the same way: nothing is kept.
_HOPELESS = (OptionError, NonFiniteError)


@dataclass(frozen=True)
class KeptRun:
    """The folder of a run and what it keeps there.

    Attributes
    ----------
    folder : RunFolder
    journal : Journal
    began_with : Standing or None
        Where an earlier process left it; None for a run that begins.
    """

    folder: RunFolder
    journal: Journal
    began_with: Standing | None

    @property
    def scratch(self) -> Path:
        """Where the tall products go."""
        return self.folder.scratch

    def standing(self, error: BaseException | None = None) -> Standing | None:
        """Where it stands now, or after an error; None where nothing is kept."""
        if isinstance(error, _HOPELESS) or not self.folder.holds_sums():
            return None
        # Somebody may have taken the folder apart; that must not hide what ended the run.
        with suppress(DamagedJournalError):
            return read_standing(self.folder.path, contents=False)
        return None


@contextmanager
def keep_run(
    out: Path | None,
    plan: Plan,
    scratch: Path,
    control: Control,
    *,
    own_scratch: bool,
    start_over: bool,
    save_every: float,
    command: Sequence[str],
) -> Iterator[KeptRun | None]:
    """Ask for room, then keep the run's folder beside its result while the block runs, and after it if that is cut.

    Parameters
    ----------
    out : Path or None
        The result to be made.
    plan : Plan
    scratch : Path
        The folder under which tall products go.
    control : Control
    own_scratch : bool
        Whether the user chose that folder.
    start_over : bool
        Discard an unfinished run at `out`.
    save_every : float
        Seconds between two savings.
    command : sequence of str
        The command line, for whoever finds the run unfinished.

    Yields
    ------
    KeptRun or None
        None where it could not be gone on with: an array in memory or a graph has no fingerprint, so nothing would
        show that it is still the same.

    Raises
    ------
    OptionError, DiskFullError
        As `require_room`; DiskFullError also when a device takes no more later.
    ResultError
        As `RunFolder.open`.
    """
    wide = np.dtype(np.complex128 if plan.spec.dtype.kind == "c" else np.float64)
    named = sum(names.count for names in (plan.sample_names, plan.feature_names) if names is not None)
    result = store_cost((plan.samples, plan.features), plan.rank, wide, named).disk_bytes
    needs = [Need("scratch", scratch, plan.scratch_bytes)]
    if out is None or not plan.spec.fingerprint:
        needs += [] if out is None else [Need("result", _parent(out), result)]
        require_room(needs)
        with full_device_named(needs):
            yield None
        return
    folder = RunFolder(out, identity_of(plan), scratch if own_scratch else None, command)
    parent = folder.path.parent
    needs = [
        Need("scratch", scratch, plan.scratch_bytes, folder.scratch),
        Need("journal", parent, journal_bytes(plan), folder.path),
        Need("result", parent, result),
    ]
    require_room(needs)
    folder.open(start_over=start_over)
    keep = False
    try:
        began_with = read_standing(folder.path) if folder.holds_sums() else None
        with full_device_named(needs):
            yield KeptRun(folder, Journal(folder.path, control, every=save_every), began_with)
    except _HOPELESS:
        raise
    except BaseException:
        keep = folder.holds_sums()
        raise
    finally:
        folder.close(keep=keep)


def _parent(out: Path) -> Path:
    """The folder of a result."""
    return out.expanduser().resolve().parent
