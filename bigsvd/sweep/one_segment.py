"""The only loop that reads A: a run of panels, each read and added to the sums by one worker."""

from __future__ import annotations

import numpy as np

from bigsvd.sweep.partial import Partial
from bigsvd.sweep.segment import Segment
from bigsvd.sweep.sparse_segment import SparseSegment
from bigsvd.sweep.task import SweepTask


def run_segment(task: SweepTask, first: int, stop: int) -> Partial:
    """Sweep panels first … stop.

    Parameters
    ----------
    task : SweepTask
    first, stop : int
        Half-open range of panels.

    Returns
    -------
    Partial
        Sums over the panels, taken in order.

    Notes
    -----
    Cost per panel: one read, 4·lines·across·width flops (4·nonzeros·width where zeros are left out), 2·lines·columns²
    flops for the fold.
    """
    with np.errstate(all="ignore"):
        form = SparseSegment if task.reader.geometry.sparse else Segment
        segment = form(task)
        for panel in range(first, stop):
            segment.take(panel, last=panel + 1 == stop)
        sums = segment.finish()
    task.reader.control.spend(segment.watch.seconds)
    return sums
